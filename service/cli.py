"""The command ``slackwater``."""

from __future__ import annotations

from service.threads import fix_blas_threads

fix_blas_threads()  # before anything below imports numpy

import errno  # noqa: E402
import importlib  # noqa: E402
import logging  # noqa: E402
from collections.abc import Mapping  # noqa: E402
from importlib.metadata import version  # noqa: E402
from pathlib import Path  # noqa: E402
from typing import Annotated  # noqa: E402

import typer  # noqa: E402

app = typer.Typer(
    name="slackwater",
    help="Says when the leading modes of a running simulation or measurement have settled, and how long it still "
    "has to run. It advises; a person stops the machine.",
    no_args_is_help=True,
    add_completion=False,
)

# Commands of other parts: each module has register(app). Imported only here, so that what they need is their own.
_PARTS = (
    "service.commands_wait",
    "service.commands_campaign",
    "service.commands_feed",
    "service.commands_watch",
    "service.demo.command",
    "streaming.calibration.command",
)


def _show_version(wanted: bool) -> None:
    if wanted:
        print(f"slackwater {version('slackwater')}")
        raise typer.Exit


@app.callback()
def main(
    show_version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and end.")
    ] = False,
) -> None:
    pass


@app.command("serve")
def serve_command(
    host: Annotated[
        str | None, typer.Option(help="Address to listen on [127.0.0.1]; beyond this machine needs a token.")
    ] = None,
    port: Annotated[int | None, typer.Option(help="Port to listen on [8350]; 0 takes a free one.")] = None,
    data_directory: Annotated[Path | None, typer.Option(help="Where runs are kept [./slackwater-data].")] = None,
    config: Annotated[Path | None, typer.Option(help="TOML file with any setting.", envvar="SLACKWATER_CONFIG")] = None,
    max_body_bytes: Annotated[int | None, typer.Option(help="Largest batch taken [1 GiB].")] = None,
    min_free_bytes: Annotated[
        int | None, typer.Option(help="Refuse batches below this much free disk [256 MiB].")
    ] = None,
) -> None:
    """Run the service until Ctrl-C or SIGTERM.

    Settings come from these flags, then SLACKWATER_* in the environment (SLACKWATER_TOKEN sets the bearer
    token), then the TOML file, then the defaults in brackets. What was acknowledged survives any end of the
    process; starting again goes on where it stopped.
    """
    flags = {
        "host": host,
        "port": port,
        "data_directory": data_directory,
        "max_body_bytes": max_body_bytes,
        "min_free_bytes": min_free_bytes,
    }
    run_service(flags, config)


def run_service(flags: Mapping[str, object], config: Path | None) -> None:
    """Open the service and serve; what prevents it is said in one line, with exit code 1."""
    from pydantic import ValidationError

    from service.core import Service
    from service.durable import DirectoryInUseError
    from service.registry import RegistryError
    from service.server import address_of, listen, serve
    from service.settings import load_settings

    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(levelname)s %(name)s: %(message)s")
    try:
        settings = load_settings(flags, config)
        service = Service(settings)
        listener = listen(settings)
    except ValidationError as error:
        raise _refused("; ".join(_setting_text(one) for one in error.errors())) from error
    except (DirectoryInUseError, RegistryError, OSError) as error:
        if isinstance(error, OSError) and error.errno == errno.EADDRINUSE:
            raise _refused(
                f"port {settings.port} is in use; choose another with --port, or 0 for a free one"
            ) from error
        raise _refused(str(error)) from error
    print(f"Slackwater listens on {address_of(settings, listener)}")
    print(f"Data directory: {settings.data_directory.absolute()}")
    print("Stop with Ctrl-C.", flush=True)
    serve(service, listener)


def _setting_text(error: object) -> str:
    assert isinstance(error, dict)
    name = ".".join(str(part) for part in error["loc"])
    text = str(error["msg"]).removeprefix("Value error, ")
    return f"{name}: {text}" if name else text


def _refused(text: str) -> typer.Exit:
    typer.echo(f"slackwater: {text}", err=True)
    return typer.Exit(1)


def _register_parts() -> None:
    for name in _PARTS:
        try:
            part = importlib.import_module(name)
        except ModuleNotFoundError as error:
            # A part that is not installed; anything else that is missing inside it is an error.
            if error.name is None or not name.startswith(error.name):
                raise
            continue
        part.register(app)


_register_parts()

if __name__ == "__main__":
    app(prog_name="slackwater")
