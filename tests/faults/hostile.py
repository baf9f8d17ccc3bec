"""Bodies that nobody means well with: NPY headers that lie, and declarations that ask for the impossible."""

from __future__ import annotations

import io
import json
import pickle
import struct
from itertools import product

import numpy as np

from tests.service.serving import declaration, npy, snapshots

GOOD = npy(snapshots(0, 3))
GOOD_HEADER, GOOD_DATA = GOOD[:128], GOOD[128:]


def header(text: str, version: tuple[int, int] = (1, 0), length: int | None = None) -> bytes:
    """An NPY header with this text, and a length that may be another."""
    size = struct.pack("<H" if version[0] == 1 else "<I", len(text) if length is None else length)
    return b"\x93NUMPY" + bytes(version) + size + text.encode("latin-1")


def says(descr: str, shape: str, order: str = "False") -> bytes:
    return header(f"{{'descr': {descr}, 'fortran_order': {order}, 'shape': {shape}, }}\n")


DESCRIPTIONS = [
    *("'|S0'", "'|S4'", "'<U0'", "'|O'", "'|V0'", "'|V8'", "'<M8[ns]'", "'<m8[s]'", "'<i4'", "'<u8'", "'|b1'", "'<f2'"),
    *(
        "'<f16'",
        "'<c8'",
        "'=f4'",
        "'f4'",
        "'float32'",
        "'<f4,<f4'",
        "[('a', '<f4')]",
        "[('a', '|O')]",
        "None",
        "4",
        "''",
    ),
    *("'<f4' * 1000000", "('<f4', (2,))", "{'names': ['a']}", "'<f4\\x00'", "b'<f4'", "['<f4']"),
]
SHAPES = [
    *(
        "(3, 2, 47)",
        "(2, 48)",
        "(0, 2, 48)",
        "(3, 0, 48)",
        "(-3, 2, 48)",
        "(3, -2, -48)",
        "(10000000000000, 2, 48)",
        "()",
    ),
    *("(281474976710656, 281474976710656)", "(1e3, 2, 48)", "(3.0, 2, 48)", "(True, 2, 48)", "[3, 2, 48]", "3", "None"),
    *(
        "(3, 2, 48, 1)",
        "(" + "1, " * 40 + ")",
        "(3, 2, 9" + "9" * 300 + ")",
        "('3', 2, 48)",
        "(3, 2, 48",
        "(3, (2, 48))",
    ),
    *("(3 if 1 else 2, 2, 48)", "(3, 2, __import__('os'))", "(0x3, 2, 49)", "(3 + 1, 2, 48)"),
]
MALFORMED = {
    "empty": b"",
    "zeros": bytes(4096),
    "text": b"0.1 0.2 0.3\n" * 100,
    "pickle": pickle.dumps({"a": np.zeros(4)}),
    "zip magic": b"PK\x03\x04" + bytes(500),
    "HDF5 magic": b"\x89HDF\r\n\x1a\n" + bytes(500),
    "magic only": b"\x93NUMPY",
    "magic twice": b"\x93NUMPY" * 40,
    "deep": header("(" * 4000 + "\n"),
    "deep lists": header("[" * 1500 + "]" * 1500 + "\n"),
    "many keys": header("{" + ", ".join(f"'k{n}': {n}" for n in range(300)) + "}\n"),
    "a key twice": header("{'descr': '<f4', 'descr': '<f8', 'fortran_order': False, 'shape': (3, 2, 48)}\n")
    + GOOD_DATA,
    "a key more": header("{'descr': '<f4', 'fortran_order': False, 'shape': (3, 2, 48), 'x': 1}\n") + GOOD_DATA,
    "a key less": header("{'descr': '<f4', 'shape': (3, 2, 48)}\n") + GOOD_DATA,
    "a call": header("__import__('os').getcwd()\n"),
    "a lambda": header("(lambda: 0)()\n"),
    "a comprehension": header("{k: k for k in 'abc'}\n"),
    "a long product": header("{'shape': (9**9**9,)}\n"),
    "a null byte": header("{'descr': '<f4'\0}\n"),
    "not ASCII": header("{'descr': '<f4\xe9'}\n"),
    "header length 65535": header("{}\n", length=65535) + bytes(70000),
    "header length 4 GiB": header("{}\n", (2, 0), 2**32 - 1) + bytes(9000),
    "header length 0": header("", length=0) + GOOD_DATA,
    "Fortran order": npy(np.asfortranarray(snapshots(0, 3))),
    "Fortran is 0": says("'<f4'", "(3, 2, 48)", "0") + GOOD_DATA,
    "objects": npy(np.full((3, 2, 48), None)),
    "structured": npy(np.zeros(3, [("u", "<f4", (2, 48))])),
    "a byte short": GOOD[:-1],
    "a byte long": GOOD + b"\0",
    "twice": GOOD + GOOD,
    "header only": GOOD_HEADER,
    "half a header": GOOD[:70],
    "a bit of the magic": b"\x92" + GOOD[1:],
    **{
        f"version {a}.{b}": b"\x93NUMPY" + bytes((a, b)) + GOOD[8:]
        for a, b in product((0, 1, 4, 255), (0, 7))
        if a != 1 or b
    },
}


def spoiled(value: float, at: int, dtype: str) -> bytes:
    batch = snapshots(0, 3).astype(dtype)
    batch.reshape(-1)[at] = value
    return npy(batch)


def arrays() -> dict[str, bytes]:
    """By name; none may be taken as a batch of two fields on 48 points in float32."""
    values = [
        (v, at, t)
        for v, t in ((np.nan, "<f4"), (np.inf, ">f4"), (-np.inf, "<f8"), (1e300, "<f8"))
        for at in (0, 150, 287)
    ]
    compressed = io.BytesIO()
    np.savez_compressed(compressed, a=snapshots(0, 3))
    return {
        **{f"type {text}": says(text, "(3, 2, 48)") + GOOD_DATA for text in DESCRIPTIONS},
        **{f"shape {text[:40]}": says("'<f4'", text) + GOOD_DATA for text in SHAPES},
        **MALFORMED,
        **{f"{v} at {at} in {t}": spoiled(v, at, t) for v, at, t in values},
        "npz": compressed.getvalue(),
    }


def declarations() -> dict[str, bytes]:
    """By name; none may be declared."""
    changes: list[dict[str, object]] = [
        *({"n_points": n} for n in (0, -1, 47, 10**13, 10**30, 1.5, None, True, [48], 1e308)),
        *({"fields": f} for f in ([], None, "u", [{}], [{"name": ""}], [{"name": "a/b"}], [{"name": "p"}] * 65)),
        *({"dtype": t} for t in ("float16", "object", "f4", None, 4)),
        *({"retained_rank": n} for n in (0, -1, 10**6, 2**63, "six", 1.5)),
        *({"block_length": n} for n in (-1, 10**9, "twelve")),
        *(
            {"grid": g}
            for g in ({"kind": "cube"}, {}, [], {"kind": "uniform", "shape": [10**7, 10**7], "spacing": [1, 1]})
        ),
        *(
            {"grid": {"kind": "uniform", "shape": [6, 8], "spacing": s}}
            for s in ([0, 1], [-1, 1], [1], ["a", 1], [1e400, 1])
        ),
        *(
            {"criterion": c}
            for c in ({"n_modes": 0}, {"n_modes": 10**9}, {"confidence": 1}, {"confidence": 2}, {"x": 1}, [])
        ),
        *({"labels": c} for c in ([], {"a": {"b": 1}}, {f"k{n}": n for n in range(65)}, {"a": [1]})),
        *({"name": n} for n in ("", "a\0b", "a" * 100_000, None, 3, ["a"])),
        *({"time": t} for t in ({"step": 0}, {"step": -1}, {"step": "x"}, {"unit": "s" * 1000}, [])),
        *(
            {"parts": p}
            for p in ([], [{"start": 0, "stop": 47}], [{"start": 5, "stop": 1}], [{"start": 0, "stop": 10**13}])
        ),
        *({name: 1} for name in ("retained_rnak", "__proto__", "__class__", "weights", "a" * 10_000)),
    ]
    text = json.dumps(declaration())
    return {
        **{
            json.dumps(change)[:60] + f" #{k}": json.dumps(declaration(**change)).encode()
            for k, change in enumerate(changes)
        },
        "empty": b"",
        "brace": b"{",
        "deep lists": b"[" * 200_000,
        "deep objects": b'{"a":' * 200_000,
        "deep labels": text[:-1].encode() + b', "labels": ' + b'{"a":' * 50_000 + b"1" + b"}" * 50_000 + b"}",
        "NaN": text.replace("0.01", "NaN").encode(),
        "Infinity": text.replace("0.01", "Infinity").encode(),
        "1e999": text.replace("0.01", "1e999").encode(),
        "long number": text.replace("48", "9" * 100_000).encode(),
        "null": b"null",
        "array": b"[1, 2]",
        "not UTF-8": b'{"name": "\xff\xfe"}',
        "UTF-16, a byte short": text.encode("utf-16")[:-1],
        "lone surrogate": text.replace("roof panel", "\\ud800").encode(),
        "NPY": GOOD,
    }
