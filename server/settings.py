"""What the operator decides: flags of the command line over CROSSDIP_* of the environment."""

import ipaddress
import os
from collections.abc import Mapping
from dataclasses import dataclass, fields
from pathlib import Path

from server.errors import SettingsError

PREFIX = "CROSSDIP_"


def default_data_folder(environment: Mapping[str, str]) -> Path:
    """$XDG_DATA_HOME/crossdip, or ~/.local/share/crossdip."""
    base = environment.get("XDG_DATA_HOME", "")
    return (Path(base) if base else Path.home() / ".local" / "share") / "crossdip"


def usable_cores() -> int:
    """Cores this process may use; fewer than the machine has, inside a container."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@dataclass(frozen=True)
class Settings:
    """Everything fixed at the start of a server."""

    data: Path
    host: str = "127.0.0.1"
    port: int = 8014
    workers: int = 1
    cluster: str = ""
    max_samples: int = 131_072
    max_points: int = 480
    max_realizations: int = 20_000
    access_key: str = ""
    new_access_key: bool = False

    @property
    def loopback(self) -> bool:
        """True when only this machine can connect."""
        if self.host == "localhost":
            return True
        try:
            return ipaddress.ip_address(self.host).is_loopback
        except ValueError:
            return False

    @property
    def results(self) -> Path:
        """Folder of the finished result files."""
        return self.data / "results"

    @property
    def checkpoints(self) -> Path:
        """Folder of what unfinished runs have so far."""
        return self.data / "checkpoints"


_BOUNDS = {
    "port": (0, 65_535),
    "workers": (1, 1024),
    "max_samples": (256, 2**22),
    "max_points": (1, 240_000),
    "max_realizations": (4, 1_000_000),
}


def _number(name: str, text: str) -> int:
    low, high = _BOUNDS[name]
    try:
        value = int(text)
    except ValueError:
        value = low - 1
    if not low <= value <= high:
        raise SettingsError(
            f"--{name.replace('_', '-')} (or {PREFIX}{name.upper()}) must be a whole number "
            f"from {low} to {high}, not {text!r}"
        )
    return value


def read_settings(flags: Mapping[str, object], environment: Mapping[str, str]) -> Settings:
    """Settings from flags (None: not given), then the environment, then the defaults.

    Raises SettingsError with one line that names the flag at fault.
    """
    chosen: dict[str, object] = {
        "data": default_data_folder(environment),
        "workers": usable_cores(),
    }
    for field in fields(Settings):
        given = flags.get(field.name)
        text = environment.get(PREFIX + field.name.upper()) if given is None else str(given)
        if text is None:
            continue
        if field.name in _BOUNDS:
            chosen[field.name] = _number(field.name, text)
        elif field.name == "data":
            chosen["data"] = Path(text).expanduser().absolute()
        elif field.name == "new_access_key":
            chosen["new_access_key"] = text.lower() in {"1", "true", "yes"}
        else:
            chosen[field.name] = text
    settings = Settings(**chosen)  # type: ignore[arg-type]
    if settings.access_key and len(settings.access_key) < 16:
        raise SettingsError(
            "the access key needs at least 16 characters: choose a longer one, or let "
            "--new-access-key make one"
        )
    return settings
