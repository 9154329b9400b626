"""What the operator decides: flags of the command line over CROSSDIP_* of the environment."""

import ipaddress
import os
import re
import ssl
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
class Cluster:
    """A scheduler started by somebody else; no address: this server starts its own workers."""

    address: str = ""
    ca: Path | None = None
    certificate: Path | None = None
    key: Path | None = None


@dataclass(frozen=True)
class Settings:
    """Everything fixed at the start of a server."""

    data: Path
    host: str = "127.0.0.1"
    port: int = 8014
    workers: int = 1
    cluster: Cluster = Cluster()
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


_ADDRESS = re.compile(r"(?:(tcp|tls)://)?((?:\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9._-]+):(\d{1,5}))")
_LONGEST_ADDRESS = 260
_LARGEST_CREDENTIAL_BYTES = 2**20
_CREDENTIALS = ("ca", "certificate", "key")


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


def _given(name: str, flags: Mapping[str, object], environment: Mapping[str, str]) -> str | None:
    """Text of a flag, or else of its variable; None when neither is there."""
    flag = flags.get(name)
    return environment.get(PREFIX + name.upper()) if flag is None else str(flag)


def _credential(name: str, text: str) -> Path:
    """A readable file of credentials of a sane size."""
    path = Path(text).expanduser().absolute()
    told = f"--cluster-{name} (or {PREFIX}CLUSTER_{name.upper()}): {path}"
    try:
        with path.open("rb") as file:
            size = len(file.read(_LARGEST_CREDENTIAL_BYTES + 1))
    except OSError as error:
        raise SettingsError(
            f"{told} cannot be read ({error.strerror}): name a PEM file this user may read"
        ) from None
    if not 0 < size <= _LARGEST_CREDENTIAL_BYTES:
        raise SettingsError(f"{told} is empty or larger than 1 MB: name a PEM file")
    return path


def _check_credentials(ca: Path, certificate: Path, key: Path) -> None:
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
    try:
        context.load_verify_locations(cafile=ca)
    except ssl.SSLError:
        raise SettingsError(f"--cluster-ca: {ca} holds no certificate in PEM form") from None
    try:
        # An empty password, or the library would stop and ask for one on the terminal.
        context.load_cert_chain(certificate, key, password="")
    except (ssl.SSLError, ValueError):
        raise SettingsError(
            f"--cluster-certificate {certificate} and --cluster-key {key} are no pair of a "
            "certificate and its private key in PEM form, without a password"
        ) from None


def _cluster(flags: Mapping[str, object], environment: Mapping[str, str]) -> Cluster:
    """The scheduler to join; raises SettingsError with one line that names the flag at fault."""
    text = _given("cluster", flags, environment) or ""
    files = {
        name: _credential(name, given)
        for name in _CREDENTIALS
        if (given := _given(f"cluster_{name}", flags, environment))
    }
    all_three = "--cluster-ca, --cluster-certificate and --cluster-key"
    if files and len(files) < len(_CREDENTIALS):
        missing = " and ".join(f"--cluster-{name}" for name in _CREDENTIALS if name not in files)
        raise SettingsError(f"TLS takes {all_three} together: give {missing} too")
    if not text:
        if files:
            raise SettingsError(f"{all_three} go with --cluster ADDRESS: give it too")
        return Cluster()
    match = _ADDRESS.fullmatch(text) if len(text) <= _LONGEST_ADDRESS else None
    if match is None or not 1 <= int(match[3]) <= _BOUNDS["port"][1]:
        raise SettingsError(
            f"--cluster (or {PREFIX}CLUSTER) must be the scheduler's address, such as "
            f"tcp://node1:8786, not {text[:_LONGEST_ADDRESS]!r}"
        )
    if match[1] == "tls" and not files:
        raise SettingsError(f"--cluster {text} needs {all_three}")
    if match[1] == "tcp" and files:
        raise SettingsError(f"--cluster {text} is not encrypted: write tls://{match[2]}")
    if not files:
        return Cluster(f"tcp://{match[2]}")
    _check_credentials(**files)
    return Cluster(f"tls://{match[2]}", **files)


def read_settings(flags: Mapping[str, object], environment: Mapping[str, str]) -> Settings:
    """Settings from flags (None: not given), then the environment, then the defaults.

    Raises SettingsError with one line that names the flag at fault.
    """
    chosen: dict[str, object] = {
        "data": default_data_folder(environment),
        "workers": usable_cores(),
        "cluster": _cluster(flags, environment),
    }
    for field in fields(Settings):
        text = _given(field.name, flags, environment)
        if text is None or field.name == "cluster":
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
