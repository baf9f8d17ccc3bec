"""Print the table of speeds: ``python -m tests.benchmarks [--rows 1e6] [--rank 32]``.

Each figure is a median over repeats, and each ratio is taken within one run, since machines drift.
"""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable, Iterator

import numpy as np
from rich.console import Console
from rich.table import Table

from streaming import RunDeclaration, SnapshotStream
from streaming.assessment import assess
from streaming.basis import memory_needed_bytes
from streaming.evidence import Context

Row = tuple[str, str, str, str]


def main() -> None:
    """Measure, and print a table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=float, default=1e6, help="rows of a snapshot, m")
    parser.add_argument("--rank", type=int, default=32, help="retained rank, R")
    parser.add_argument("--dtypes", nargs="+", default=["float32", "float64"])
    chosen = parser.parse_args()
    table = Table(title=f"Update at m = {chosen.rows:g}, R = {chosen.rank}, blocks of {2 * chosen.rank}")
    for heading in ("measured", "value", "reference", "ratio"):
        table.add_column(heading)
    console = Console()
    for dtype in chosen.dtypes:
        console.print(f"measuring {dtype} ...", style="dim")
        for row in update_rows(int(chosen.rows), chosen.rank, dtype):
            table.add_row(*row)
    console.print("measuring a stored record and its Gram matrix ...", style="dim")
    for row in stored_record_rows(int(chosen.rows), chosen.rank):
        table.add_row(*row)
    console.print("measuring a long record and an evaluation ...", style="dim")
    table.add_row(*long_record_row())
    table.add_row(*evaluation_row())
    console.print(table)


def update_rows(n_rows: int, rank: int, dtype: str) -> Iterator[Row]:
    """Snapshots per second of the update beside IncrementalPCA, and its flop rate beside the square GEMM."""
    batches = structured_batches(n_rows, 2 * rank, dtype)
    gemm = gemm_rate(dtype)
    ours, look = update_rates(n_rows, rank, dtype, batches)
    theirs = incremental_pca_rate(rank, batches)
    flops = 9 * n_rows * rank * ours
    yield (f"update, {dtype}", f"{ours:.0f} snapshots/s", f"IncrementalPCA {theirs:.2f}/s", f"{ours / theirs:.0f} x")
    yield (
        f"same, by 9 m R flops, {dtype}",
        f"{flops / 1e9:.0f} Gflop/s",
        f"square GEMM {gemm / 1e9:.0f} Gflop/s",
        f"{100 * flops / gemm:.0f} %",
    )
    block = 2 * rank / ours
    yield (f"a look, {dtype}", f"{1e3 * look:.0f} ms", f"its block {1e3 * block:.0f} ms", f"{look / block:.2f}")


def structured_batches(n_rows: int, length: int, dtype: str) -> list[np.ndarray]:
    """Two batches of eight decaying structures in noise."""
    rng = np.random.default_rng(0)
    structures = rng.standard_normal((8, n_rows)).astype(dtype)
    out = []
    for _ in range(2):
        amplitudes = (rng.standard_normal((length, 8)) * 2.0 ** -np.arange(8)).astype(dtype)
        noise = rng.standard_normal((length, n_rows), dtype=np.dtype(dtype)) * np.asarray(0.3, dtype)
        out.append(amplitudes @ structures + noise)
    return out


def update_rates(n_rows: int, rank: int, dtype: str, batches: list[np.ndarray]) -> tuple[float, float]:
    """Snapshots per second of `SnapshotStream.absorb`, and seconds that a look adds to its block.

    Medians from the 17th block on; blocks with a look apart from those without, since looks grow ever rarer.
    """
    stream = SnapshotStream(plain_declaration(n_rows, rank, dtype))
    plain, looked = [], []
    for k in range(36):
        looks = len(stream.history)
        seconds = elapsed(lambda k=k: stream.absorb(batches[k % 2]))
        if k >= 16:
            (plain if len(stream.history) == looks else looked).append(seconds)
    block = statistics.median(plain)
    return len(batches[0]) / block, statistics.median(looked) - block


def incremental_pca_rate(rank: int, batches: list[np.ndarray]) -> float:
    """Snapshots per second of scikit-learn's IncrementalPCA on the same batches, from its second one on."""
    from sklearn.decomposition import IncrementalPCA

    model = IncrementalPCA(n_components=rank)
    model.partial_fit(batches[0][: 2 * rank])
    return len(batches[1]) / elapsed(lambda: model.partial_fit(batches[1]))


def gemm_rate(dtype: str, size: int = 4096, repeats: int = 5) -> float:
    """Flops per second of a square matrix product with all threads."""
    left = np.random.default_rng(1).standard_normal((size, size)).astype(dtype)
    right = left.copy()
    left @ right
    return 2.0 * size**3 / statistics.median(elapsed(lambda: left @ right) for _ in range(repeats))


def stored_record_rows(n_rows: int, rank: int, n_snapshots: int = 1024) -> Iterator[Row]:
    """The update of all snapshots against storing them, their Gram matrix and its modes at the end, float32."""
    batches = structured_batches(n_rows, 2 * rank, "float32")
    n_batches = n_snapshots // (2 * rank)
    declaration = RunDeclaration.model_validate(plain_declaration(n_rows, rank, "float32"))
    stream = SnapshotStream(declaration)
    ours = elapsed(lambda: [stream.absorb(batches[k % 2]) for k in range(n_batches)])
    stored = np.concatenate([batches[k % 2] for k in range(n_batches)])
    theirs = elapsed(lambda: modes_at_the_end(stored, rank))
    yield (
        f"{n_snapshots} snapshots",
        f"{ours:.1f} s",
        f"stored, Gram at the end {theirs:.1f} s",
        f"{theirs / ours:.1f} x",
    )
    memory = memory_needed_bytes(declaration)
    yield (
        "memory for them",
        f"{memory / 1e6:.0f} MB",
        f"stored {stored.nbytes / 1e6:.0f} MB",
        f"{memory / stored.nbytes:.3f}",
    )


def modes_at_the_end(stored: np.ndarray, rank: int) -> np.ndarray:
    """Method of snapshots in plain numpy."""
    stored -= stored.mean(axis=0)
    values, vectors = np.linalg.eigh(stored @ stored.T)
    leading = vectors[:, : -rank - 1 : -1] / np.sqrt(values[: -rank - 1 : -1])
    modes: np.ndarray = leading.T.astype(stored.dtype) @ stored
    return modes


def evaluation_row(rank: int = 40, repeats: int = 7) -> Row:
    """One convergence evaluation at R = 40 with a full ledger, processor time of one thread."""
    stream = SnapshotStream(plain_declaration(2000, rank, "float32"))
    batches = structured_batches(2000, 2 * rank, "float32")
    k = 0
    while stream.n_applied < 100 or stream.convergence().n_blocks < 60:
        stream.absorb(batches[k % 2])
        k += 1
    moments, criterion, context = stream.moments(), stream.declaration.criterion, Context(stream.n_applied, 2 * rank)
    seconds = []
    for _ in range(repeats):
        start = time.process_time()
        assess(moments, criterion, context)
        seconds.append(time.process_time() - start)
    return ("evaluation, R = 40, 64 blocks", f"{1e3 * statistics.median(seconds):.0f} ms", "goal 50 ms", "")


def long_record_row(n_rows: int = 2000, rank: int = 16, n_snapshots: int = 100_000) -> Row:
    """Processor time per block around snapshot 100,000 against 1,000, small m; looks are rare and left out."""
    stream = SnapshotStream(plain_declaration(n_rows, rank, "float32"))
    batches = structured_batches(n_rows, 2 * rank, "float32")
    window = 200 * 2 * rank
    times: dict[int, float] = {}
    for start in range(0, n_snapshots, 2 * rank):
        looks = len(stream.history)
        begin = time.process_time()
        stream.absorb(batches[(start // (2 * rank)) % 2])
        if len(stream.history) == looks:
            times[start] = time.process_time() - begin
    early = statistics.median(s for k, s in times.items() if 1000 <= k < 1000 + window)
    late = statistics.median(s for k, s in times.items() if k >= n_snapshots - window)
    return (
        "block at snapshot 100,000",
        f"{1e3 * late:.2f} ms",
        f"at 1,000 {1e3 * early:.2f} ms",
        f"{late / early:.2f} x",
    )


def plain_declaration(n_rows: int, rank: int, dtype: str) -> dict[str, object]:
    """A run with one field and nothing special."""
    return {
        "name": "benchmark",
        "n_points": n_rows,
        "fields": [{"name": "u"}],
        "dtype": dtype,
        "retained_rank": rank,
        "criterion": {"n_modes": 4},
    }


def elapsed(work: Callable[[], object]) -> float:
    """Wall seconds of one call."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


if __name__ == "__main__":
    main()
