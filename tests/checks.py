"""The record of checks against the outside: what was compared, with what, and how far off it was.

A test that holds the project against something outside it (a published formula, a table, another
library, common practice) says so through :func:`check`. A session of tests that made any writes
them as a table; ``python -m tests --record`` puts that table into DEVELOPERS.md.
"""

import math
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parent.parent
TABLE = ROOT / ".checks" / "last.md"
GUIDE = ROOT / "DEVELOPERS.md"
BEGIN, END = "<!-- checks -->", "<!-- end of checks -->"


@dataclass(frozen=True)
class Check:
    """One comparison; deviation and what is allowed of it are in ``unit``, none for a ratio."""

    name: str
    source: str
    deviation: float
    allowed: float
    unit: str = ""

    @property
    def share(self) -> float:
        """Deviation in units of what is allowed; infinite for one that is no number."""
        if math.isnan(self.deviation):
            return math.inf
        return self.deviation / self.allowed if self.allowed else self.deviation

    def row(self) -> str:
        """A row of the table."""
        unit = f" {self.unit}" if self.unit else ""
        cells = (self.name, self.source, f"{self.deviation:.2g}{unit}", f"{self.allowed:.2g}{unit}")
        return f"| {' | '.join(cells)} |"


_made: dict[str, Check] = {}


def check(name: str, source: str, deviation: float, allowed: float, unit: str = "") -> None:
    """Assert that a deviation is at most what is allowed, and keep it for the record.

    Of checks with one name the one that comes nearest to its limit is kept. ``unit`` "σ" is for
    deviations in standard errors.
    """
    made = Check(name, source, float(deviation), float(allowed), unit)
    if name not in _made or made.share >= _made[name].share:
        _made[name] = made
    assert made.share <= 1.0, f"{name}: off by {deviation:.3g} {unit}, allowed {allowed:.3g}"


def table(made: list[Check]) -> str:
    """Markdown, by name, so that it changes little from one run to the next."""
    head = "| Check | Against | Largest deviation | Allowed |\n| --- | --- | --- | --- |\n"
    return head + "".join(
        f"{one.row()}\n" for one in sorted(made, key=lambda one: one.name.casefold())
    )


def write_record(path: Path = TABLE) -> None:
    """Write the table of this session, if it made any checks."""
    if _made:
        path.parent.mkdir(exist_ok=True)
        path.write_text(table(list(_made.values())))


def put_record(guide: Path = GUIDE, record: Path = TABLE) -> None:
    """Replace what stands between the markers of the guide by the last session's table."""
    before, _, rest = guide.read_text().partition(BEGIN)
    _, _, after = rest.partition(END)
    guide.write_text(f"{before}{BEGIN}\n{record.read_text()}{END}{after}")
