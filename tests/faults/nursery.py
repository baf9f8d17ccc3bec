"""Starts services by the hundred: a process that has imported the service once, and forks one for each order.

Run as ``python -m tests.faults.nursery`` with the shim preloaded. Each line of standard input is an order (JSON:
``data``, ``control``, ``answers``, ``log``, ``settings``); the reply is the process id of the new service, which runs
the ordinary ``slackwater serve`` under the shim. A line ``{"reap": pid}`` is answered with its exit status. The fork
happens before any thread exists, so that the child is as good as a process of its own; it saves a second of imports
for each.
"""

from __future__ import annotations

import json
import os
import sys
import threading
from typing import Any

from service import app, cli, core, server, worker  # noqa: F401 - imported once for all children

# A run that was held up by the disk is tried again after this; the five seconds of a real service, hundreds of
# times, would be most of the campaign.
BACK_OFF_SECONDS = 0.2


def main() -> None:
    assert threading.active_count() == 1, threading.enumerate()
    for line in sys.stdin:
        order = json.loads(line)
        if "reap" in order:
            _, status = os.waitpid(order["reap"], 0)
            reply = os.waitstatus_to_exitcode(status)
        else:
            reply = os.fork()
            if reply == 0:
                _serve(order)
        print(reply, flush=True)


def _serve(order: dict[str, Any]) -> None:
    """The child: redirect, attach the shim, serve, and end without returning to the loop."""
    code = 1
    try:
        for path, descriptor in ((os.devnull, 0), (order["answers"], 1), (order["log"], 2)):
            opened = os.open(path, os.O_RDWR if descriptor == 0 else os.O_WRONLY | os.O_APPEND | os.O_CREAT, 0o600)
            os.dup2(opened, descriptor)
            os.close(opened)
        os.environ.update(order["settings"])
        if order["control"]:
            _attach(order["control"], order["data"])
        worker.BACK_OFF_SECONDS = BACK_OFF_SECONDS
        cli.run_service({"data_directory": order["data"], "port": 0}, None)
        code = 0
    except SystemExit as end:
        code = end.code if isinstance(end.code, int) else 1
    except BaseException as error:
        code = getattr(error, "exit_code", 1)
        print(f"ended by {error!r}", file=sys.stderr)
    finally:
        sys.stdout.flush()
        sys.stderr.flush()
        os._exit(code)


def _attach(control: str, data: str) -> None:
    import ctypes

    failed = ctypes.CDLL(None).faults_attach(control.encode(), data.encode())
    if failed:
        raise OSError(failed, f"the shim could not map {control}")


if __name__ == "__main__":
    main()
