"""What the demonstration found, in words and in files."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rich.console import Console

from service.demo.duct import BAR_HEIGHT_M, FIXED_PLAN_SNAPSHOTS, REYNOLDS, SPEED_M_S
from service.folders import Folders
from service.verdict_text import groups_table, headline, max_angle_of, modes_table
from slackwater_client import ConvergenceReport, Run
from streaming.declaration import RunDeclaration

CAUTION = (
    "Settled modes mean that the sampling of what was recorded suffices. They say nothing of mesh, model or of "
    "states that the flow has not visited. Not for certification or safety decisions."
)


@dataclass(frozen=True)
class Findings:
    """The end of a run: the report, and where its files are."""

    report: ConvergenceReport
    declaration: dict[str, Any]
    checkpoint: Path | None
    pictures: list[Path]


def gather(run: Run, data_directory: Path, picture_directory: Path) -> Findings:
    """Read the last report and draw the leading modes and the mean."""
    declaration = run.refresh()["declaration"]
    checkpoints = sorted(Folders(data_directory).run(run.id).checkpoints.glob("*/fields.zarr"))
    return Findings(
        report=run.convergence(),
        declaration=declaration,
        checkpoint=checkpoints[-1] if checkpoints else None,
        pictures=draw(run, RunDeclaration.model_validate(declaration), picture_directory),
    )


def draw(run: Run, declaration: RunDeclaration, directory: Path) -> list[Path]:
    """Write one picture for each field of the mean and of each wanted mode."""
    directory.mkdir(exist_ok=True)
    from service.pictures import mean_png, mode_png  # late: the drawing library takes a second to import

    pictures: dict[str, bytes] = {}
    mean, modes = run.mean(), run.modes(declaration.criterion.n_modes)
    for k, field in enumerate(declaration.fields):
        of_mean = f"{run.name}: mean of {field.name}"
        pictures[f"mean-{field.name}"] = mean_png(mean[k], declaration.grid, of_mean, field.unit)
        for n, mode in enumerate(modes, start=1):
            of_mode = f"{run.name}: mode {n} of {field.name}"
            pictures[f"mode-{n}-{field.name}"] = mode_png(mode[k], declaration.grid, of_mode, field.unit)
    paths = []
    for name, png in sorted(pictures.items()):
        paths.append(directory / f"{name}.png")
        paths[-1].write_bytes(png)
    return paths


def tell(console: Console, found: Findings, seconds: float) -> None:
    """Print the findings."""
    report = found.report
    console.print()
    console.print(headline(report, found.declaration), style="bold", highlight=False, soft_wrap=True)
    for reason in report["verdict"]["reasons"]:
        console.print(f"  {reason['text']}", markup=False, highlight=False, soft_wrap=True)
    console.print(modes_table(report))
    console.print(groups_table(report, max_angle_of(found.declaration)))
    for line in [*flow_lines(report), saving_line(report, seconds), *file_lines(found), CAUTION]:
        console.print(line, markup=False, highlight=False, soft_wrap=True)


def flow_lines(report: ConvergenceReport) -> list[str]:
    """The flow and its strongest shedding."""
    lines = [
        f"Flow: Reynolds number {REYNOLDS:.0f} by the largest bar ({1000 * BAR_HEIGHT_M:g} mm) and the mean "
        f"inflow ({SPEED_M_S:g} m/s), {report['time_span']:.3g} s of it recorded."
    ]
    leading = report["modes"][0]
    strouhal, frequency = leading.get("strouhal"), leading.get("peak_frequency")
    if strouhal is not None and frequency is not None:
        lines.append(f"Mode 1 peaks at {frequency:.3g} Hz, Strouhal number {strouhal:.3g}.")
    return lines


def saving_line(report: ConvergenceReport, seconds: float) -> str:
    """Snapshots used, against the plan made beforehand."""
    n = report["n_snapshots"] + report.get("waiting_snapshots", 0)
    share = 100 * n / FIXED_PLAN_SNAPSHOTS
    return (
        f"Used {n:,} snapshots in {seconds:.0f} s; the fixed plan would have taken {FIXED_PLAN_SNAPSHOTS:,} "
        f"({share:.0f} % of it was enough)."
        if n < FIXED_PLAN_SNAPSHOTS
        else f"Used all {n:,} snapshots of the fixed plan in {seconds:.0f} s."
    )


def file_lines(found: Findings) -> list[str]:
    """Where the results are."""
    lines = [f"Checkpoint (zarr): {found.checkpoint}"] if found.checkpoint else []
    names = ", ".join(path.name for path in found.pictures)
    return [*lines, f"Pictures: {names} in {found.pictures[0].parent}"]
