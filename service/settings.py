"""Settings of the service: flags, then SLACKWATER_* in the environment, then a TOML file, then defaults."""

from __future__ import annotations

import ipaddress
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import Field, SecretStr, model_validator
from pydantic_settings import (
    BaseSettings,
    PydanticBaseSettingsSource,
    SettingsConfigDict,
    TomlConfigSettingsSource,
)

MIB = 2**20
GIB = 2**30


class Settings(BaseSettings):
    """Every setting with its unit in the name; frozen once read."""

    model_config = SettingsConfigDict(env_prefix="SLACKWATER_", frozen=True, extra="forbid")

    host: str = Field(default="127.0.0.1", description="address to listen on")
    port: int = Field(default=8350, ge=0, le=65535, description="port to listen on; 0 takes a free one")
    data_directory: Path = Field(default=Path("slackwater-data"), description="where runs are kept")
    token: SecretStr | None = Field(default=None, min_length=16, description="bearer token; needed off loopback")

    # One body: large enough for a block of the largest fields, small enough to write within a proxy's patience.
    max_body_bytes: int = Field(default=GIB, ge=1024)
    # A declaration with three axes of a million numbers each is about 60 MB of text.
    max_json_bytes: int = Field(default=64 * MIB, ge=1024)
    # Bodies being received at once: each holds a thread while it is written.
    max_open_bodies: int = Field(default=32, ge=1, le=1024)
    # A body must move: a client that sends nothing for this long gives up its place.
    body_idle_seconds: float = Field(default=60.0, gt=0, le=3600)
    # Each run costs a folder, and each open one holds (R + L + p) m numbers in memory.
    max_runs: int = Field(default=1000, ge=1)
    # Times are kept for ever, 8 bytes each.
    max_snapshots_per_batch: int = Field(default=65536, ge=1)
    # Stored ahead of a gap: these cannot be applied, so they only fill the disk.
    max_waiting_batches: int = Field(default=1024, ge=1)
    # Accepted and not yet covered by checkpoints, for each run.
    max_journal_bytes: int = Field(default=32 * GIB, ge=1024)
    # Below this much free space no batch is taken: checkpoints and the registry need room to end well.
    min_free_bytes: int = Field(default=256 * MIB, ge=0)
    # Event streams and long polls each hold a connection.
    max_event_streams: int = Field(default=64, ge=1)
    max_waits: int = Field(default=256, ge=1)
    # Memory of the bases and open blocks of all runs that are being applied: by default half of what this machine
    # has. A run that needs more alone is refused; runs that rest give way, and come back from their checkpoints.
    memory_bytes: int = Field(default_factory=lambda: physical_memory_bytes() // 2, ge=MIB)
    # Each kept checkpoint holds R m numbers.
    max_checkpoints: int = Field(default=12, ge=3)
    # Largest share of the worker's time spent on checkpoints that nothing forces.
    checkpoint_share: float = Field(default=0.05, gt=0, le=1)

    @model_validator(mode="after")
    def _guarded(self) -> Settings:
        if self.token is None and not is_loopback(self.host):
            raise ValueError(
                f"host {self.host} is reachable from other machines, so a token is needed: set SLACKWATER_TOKEN "
                "(16 characters or more), or listen on 127.0.0.1"
            )
        return self


def physical_memory_bytes() -> int:
    """Memory of this machine."""
    return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")


def is_loopback(host: str) -> bool:
    """True for localhost and for addresses that only this machine reaches."""
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host.strip("[]")).is_loopback
    except ValueError:
        return False


def load_settings(flags: Mapping[str, Any], config: Path | None = None) -> Settings:
    """Read all sources; flags that are None count as not given. Raises ValidationError naming the setting."""
    if config is not None and not config.is_file():
        raise FileNotFoundError(f"settings file {config} does not exist")

    class _Sources(Settings):
        @classmethod
        def settings_customise_sources(
            cls,
            settings_cls: type[BaseSettings],
            init_settings: PydanticBaseSettingsSource,
            env_settings: PydanticBaseSettingsSource,
            dotenv_settings: PydanticBaseSettingsSource,
            file_secret_settings: PydanticBaseSettingsSource,
        ) -> tuple[PydanticBaseSettingsSource, ...]:
            return init_settings, env_settings, TomlConfigSettingsSource(settings_cls, toml_file=config)

    return _Sources(**{name: value for name, value in flags.items() if value is not None})
