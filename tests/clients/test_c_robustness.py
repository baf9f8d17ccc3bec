"""The C client where things go wrong: sanitizers, valgrind, and peers that answer oddly."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from tests.clients.building import C_CLIENT, C_PROGRAMS, compiled, needed, run_tool
from tests.clients.conftest import Service
from tests.clients.scripted_peer import ScriptedPeer, Turn, plain
from tests.clients.test_c_client import NO_RUN, OK, UNSENT, Replays, replay, replay_program

Make = Callable[..., npt.NDArray[np.float32]]
__all__ = ["replay", "replay_program"]  # fixtures

SOURCES = [C_PROGRAMS / "replay.c", C_CLIENT / "slackwater.c"]


@pytest.mark.parametrize("compiler", ["gcc", "clang"])
@pytest.mark.parametrize("level", ["-O0", "-O3"])
def test_the_source_compiles_without_a_warning(tmp_path: Path, compiler: str, level: str) -> None:
    compiled(tmp_path / "replay", SOURCES, compiler=compiler, flags=[level])


def test_the_header_serves_cplusplus(tmp_path: Path) -> None:
    source = tmp_path / "user.cpp"
    source.write_text('#include "slackwater.h"\nint main() { return slackwater_advise(nullptr); }\n')
    flags = ["-std=c++11", "-Wall", "-Wextra", "-Wpedantic", "-Werror", f"-I{C_CLIENT}"]
    run_tool([needed("g++"), *flags, "-c", str(source), "-o", str(tmp_path / "user.o")])


def test_the_small_parts_hold_under_sanitizers(tmp_path: Path) -> None:
    program = compiled(tmp_path / "insides", [C_PROGRAMS / "insides.c"], flags=["-fsanitize=address,undefined"])
    run_tool([str(program)])


def check_damaged_answers(directory: Path, n_tries: int, seed: int) -> None:
    program = compiled(directory / "fuzz", [C_PROGRAMS / "fuzz_answers.c"], flags=["-fsanitize=address,undefined"])
    run_tool([str(program), str(n_tries), str(seed)])


def test_damaged_answers_do_no_harm(tmp_path: Path) -> None:
    check_damaged_answers(tmp_path, 20_000, 1)


@pytest.mark.campaign
def test_many_damaged_answers_do_no_harm(tmp_path: Path) -> None:
    check_damaged_answers(tmp_path, 1_000_000, 2)


@pytest.mark.parametrize("sanitizer", ["thread", "address,undefined"])
def test_a_run_is_clean_under_sanitizers(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, tmp_path: Path, sanitizer: str
) -> None:
    program = compiled(tmp_path / "replay_checked", SOURCES, flags=[f"-fsanitize={sanitizer}"])
    done = Replays(program, tmp_path)(service.url, declaration, make_snapshots(120), batch=8, memory=1 << 14, hold=20)
    assert (done.code, done.state["sent"], done.told) == (OK, 120, "")


VALGRIND = [
    "--quiet",
    "--leak-check=full",
    "--show-leak-kinds=all",
    "--errors-for-leak-kinds=all",
    "--error-exitcode=99",
]


def test_a_run_is_clean_under_valgrind(
    service: Service, declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> None:
    replay.wrapper = [needed("valgrind"), *VALGRIND]
    done = replay(service.url, declaration, make_snapshots(60), batch=8)
    assert (done.code, done.state["sent"], done.told) == (OK, 60, "")


def test_giving_up_is_clean_under_valgrind(declaration: dict[str, Any], make_snapshots: Make, replay: Replays) -> None:
    replay.wrapper = [needed("valgrind"), *VALGRIND]
    peer = ScriptedPeer([Turn(plain("201 Created", RUN)), Turn(plain("503 Service Unavailable"))])
    done = replay(peer.url, declaration, make_snapshots(60), batch=8, memory=1 << 15, flush=0.5)
    peer.close()
    assert done.code == UNSENT
    assert done.state["waiting"] > 0


# What a service answers to a declaration of 2 fields and 60 points, as short as the client needs it.
RUN = json.dumps({"id": "duct-1", "next_sequence": 0, "declaration": {"n_points": 60, "fields": [{}, {}]}})
RECEIPT = json.dumps({"verdict": "settled", "advice": "may stop", "snapshots_to_go": None})
CLOSED = json.dumps({"id": "duct-1", "verdict": "settled"})
CHUNKED = b"HTTP/1.1 201 Created\r\nTransfer-Encoding: chunked\r\n\r\n" + b"".join(
    b"%x;note=1\r\n%s\r\n" % (len(part), part) for part in (RUN[:7].encode(), RUN[7:].encode())
)


@pytest.fixture
def talk(
    declaration: dict[str, Any], make_snapshots: Make, replay: Replays
) -> Iterator[Callable[..., tuple[Any, ScriptedPeer]]]:
    """Let the client post 16 snapshots in two batches to a scripted peer."""
    peers: list[ScriptedPeer] = []

    def with_turns(*turns: Turn, snapshots: npt.NDArray[Any] | None = None, **settings: float) -> Any:
        peers.append(ScriptedPeer(turns))
        posted = make_snapshots(16) if snapshots is None else snapshots
        done = replay(peers[-1].url, declaration, posted, **{"batch": 8, "flush": 20, "idle": 2, **settings})
        return done, peers[-1]

    yield with_turns
    for peer in peers:
        peer.close()


GOOD = (Turn(plain("201 Created", RECEIPT)), Turn(plain("201 Created", RECEIPT)), Turn(plain("200 OK", CLOSED)))


@pytest.mark.parametrize(
    "turn",
    [
        Turn(plain("201 Created", RUN), piece=1),
        Turn(CHUNKED + b"0\r\nTrailer: x\r\n\r\n", piece=1),
        Turn(b"HTTP/1.0 201 Created\n\n" + RUN.encode(), closes=True),
        Turn(b"HTTP/1.1 102 Processing\r\n\r\nHTTP/1.1 103 Early Hints\r\nLink: x\r\n\r\n" + plain("201 Created", RUN)),
        Turn(plain("201 Created", RUN, "cOnNeCtIoN: ClOsE\r\n"), closes=True),
    ],
    ids=["byte by byte", "chunked with trailer", "until the end", "interim answers", "says close"],
)
def test_a_run_may_be_answered_in_any_form_of_http(talk: Callable[..., Any], turn: Turn) -> None:
    done, peer = talk(turn, *GOOD)
    assert (done.code, done.state["sent"], done.state["verdict"], done.told) == (OK, 16, "settled", "")
    assert [asked.head.split(" HTTP")[0] for asked in peer.asked] == [
        "POST /v1/runs",
        *(f"PUT /v1/runs/duct-1/batches/{k}?{times(8 * k)}" for k in (0, 1)),
        "POST /v1/runs/duct-1/close",
    ]


def times(first: int) -> str:
    return "&".join(f"time={0.5 * k + 1e-3 / 3.0:.17g}" for k in range(first, first + 8))


@pytest.mark.parametrize(
    "answer",
    [
        b"",
        b"HTTP/1.1 201",
        b"SSH-2.0-OpenSSH_9.2\r\n\r\n",
        b"HTTP/1.1 999 What\r\n\r\n",
        b"HTTP/1.1 201 Created\r\nContent-Length: 500\r\n\r\n{}",
        b"HTTP/1.1 201 Created\r\nContent-Length: 99999999999\r\n\r\n{}",
        b"HTTP/1.1 201 Created\r\nTransfer-Encoding: chunked\r\n\r\nffffffffffff\r\n",
        b"HTTP/1.1 201 Created\r\nTransfer-Encoding: chunked\r\n\r\nx\r\n",
        b"HTTP/1.1 201 Created\r\nX: " + b"x" * 20_000,
        b"HTTP/1.1 201 Created\r\n" + b"X: y\r\n" * 200 + b"\r\n",
        b"HTTP/1.1 100 Continue\r\n\r\n" * 20,
        plain("201 Created", "[]"),
        plain("201 Created", RUN.replace("60", "1e99")),
        plain("201 Created", RUN.replace("60", "99999999999999999")),
        plain("200 OK", "<html>Welcome</html>"),
    ],
)
def test_what_is_no_answer_is_no_run(talk: Callable[..., Any], answer: bytes) -> None:
    done, _ = talk(Turn(answer, closes=True), start=0.2)
    assert done.code == NO_RUN
    assert "no run: http://127.0.0.1" in done.told or "no run: no answer from http://127.0.0.1" in done.told


def test_a_declaration_whose_answer_is_lost_is_not_sent_twice(talk: Callable[..., Any]) -> None:
    done, peer = talk(Turn(b"", closes=True), start=5)
    assert done.code == NO_RUN
    assert len(peer.asked) == 1


@pytest.mark.parametrize(
    "failing",
    [
        Turn(plain("500 Internal Server Error")),
        Turn(plain("408 Request Timeout", '{"title": "idle", "type": "/problems/idle-body"}')),
        Turn(plain("400 Bad Request", '{"title": "torn", "type": "/problems/torn-body"}'), reads_body=False),
        Turn(b"", closes=True),
        Turn(b"HTTP/1.1 201 Created\r\nContent-Length: 99\r\n\r\n{", closes=True),
        Turn(b"HTTP/1.1 201 Crea"),
    ],
    ids=["failed", "stood still", "torn", "cut", "cut in the body", "stands still"],
)
def test_what_may_pass_is_tried_again_under_the_same_number(talk: Callable[..., Any], failing: Turn) -> None:
    done, peer = talk(Turn(plain("201 Created", RUN)), failing, *GOOD)
    assert (done.code, done.state["sent"]) == (OK, 16)
    batches = [asked for asked in peer.asked if asked.head.startswith("PUT")]
    assert [asked.head.split("/batches/")[1][0] for asked in batches] == ["0", "0", "1"]
    if failing.reads_body:
        assert batches[0].body == batches[1].body


def test_a_declaration_waits_for_a_service_that_is_starting(talk: Callable[..., Any]) -> None:
    done, peer = talk(Turn(plain("503 Service Unavailable")), Turn(plain("201 Created", RUN)), *GOOD)
    assert (done.code, done.state["sent"], done.told) == (OK, 16, "")
    assert [asked.head.split(" ")[1] for asked in peer.asked[:2]] == ["/v1/runs", "/v1/runs"]


@pytest.mark.parametrize("status", ["500 Internal Server Error", "504 Gateway Timeout"])
def test_a_declaration_that_may_have_been_taken_is_not_sent_twice(talk: Callable[..., Any], status: str) -> None:
    done, peer = talk(Turn(plain(status)))
    assert (done.code, len(peer.asked)) == (NO_RUN, 1)
    assert f"answered with status {status[:3]}" in done.told


def test_an_idle_connection_that_was_closed_is_no_failure(talk: Callable[..., Any]) -> None:
    done, peer = talk(Turn(plain("201 Created", RUN)), Turn(GOOD[0].answer, closes=True), *GOOD[1:], pause_ms=20)
    assert (done.code, done.state["sent"], done.told) == (OK, 16, "")
    assert len(peer.asked) == 4


def test_a_stated_pause_is_kept(talk: Callable[..., Any]) -> None:
    began = time.monotonic()
    done, _ = talk(
        Turn(plain("201 Created", RUN)), Turn(plain("429 Too Many Requests", "", "Retry-After: 1\r\n")), *GOOD
    )
    assert (done.code, done.state["sent"]) == (OK, 16)
    assert time.monotonic() - began > 1.0


def test_an_early_refusal_of_a_large_batch_is_read_although_the_body_was_not_taken(
    talk: Callable[..., Any],
) -> None:
    large = np.zeros((300, 2, 60), np.float32)  # 144 kB in one batch
    problem = '{"title": "The body is too large", "detail": "the body has 144128 bytes, at most 1000 are taken"}'
    done, _ = talk(
        Turn(plain("201 Created", RUN)),
        Turn(plain("413 Content Too Large", problem), reads_body=False),
        Turn(plain("200 OK", CLOSED)),
        snapshots=large,
        batch=300,
    )
    assert (done.code, done.state["lost"]) == (UNSENT, 300)
    assert "The body is too large (413): the body has 144128 bytes, at most 1000 are taken" in done.told


def test_an_error_text_cannot_write_to_the_terminal(talk: Callable[..., Any]) -> None:
    problem = json.dumps({"title": "no\x1b[31m\n", "detail": "x" * 2000})
    done, _ = talk(Turn(plain("422 Unprocessable Content", problem)))
    assert done.code == NO_RUN
    assert "\x1b" not in done.told
    assert len(done.told) < 600


def test_the_end_is_in_time_although_a_name_look_up_hangs(
    talk: Callable[..., Any], replay: Replays, tmp_path: Path
) -> None:
    """The client cannot interrupt getaddrinfo: it leaves the run to its thread and goes."""
    source = tmp_path / "slow_names.c"
    source.write_text(SLOW_NAMES)
    run_tool([needed("gcc"), "-shared", "-fPIC", "-o", str(tmp_path / "slow_names.so"), str(source), "-ldl"])
    replay.environment = {"LD_PRELOAD": str(tmp_path / "slow_names.so")}
    began = time.monotonic()
    done, _ = talk(Turn(plain("201 Created", RUN), closes=True), flush=0.3)
    assert time.monotonic() - began < 4.0
    assert (done.code, done.state["waiting"]) == (UNSENT, 16)


# A look-up that works once and then hangs, in front of the real one.
SLOW_NAMES = """
#define _GNU_SOURCE
#include <dlfcn.h>
#include <netdb.h>
#include <unistd.h>
int getaddrinfo(const char *node, const char *service, const struct addrinfo *hints, struct addrinfo **found)
{
    static int calls;
    int (*real)(const char *, const char *, const struct addrinfo *, struct addrinfo **);
    real = dlsym(RTLD_NEXT, "getaddrinfo");
    if (calls++ > 0)
        sleep(10);
    return real(node, service, hints, found);
}
"""
