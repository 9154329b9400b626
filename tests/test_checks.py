"""The record of checks: what is kept of them, and where it is put."""

import math
from pathlib import Path

import pytest

from tests import checks


@pytest.fixture(autouse=True)
def own_record(monkeypatch: pytest.MonkeyPatch) -> None:
    """A record of each test's own, so that this session's is left alone."""
    monkeypatch.setattr(checks, "_made", {})


def test_the_nearest_to_its_limit_is_kept(tmp_path: Path) -> None:
    """One row a name, with its unit; a limit may differ from one to the next."""
    checks.check("a", "table", 0.5, 1.0)
    checks.check("a", "table", 0.03, 0.04, "ps")
    checks.check("a", "table", 0.6, 1.0)
    checks.check("b", "formula", 0.0, 0.0)
    checks.write_record(tmp_path / "made" / "last.md")
    rows = (tmp_path / "made" / "last.md").read_text().splitlines()
    assert rows[2:] == ["| a | table | 0.03 ps | 0.04 ps |", "| b | formula | 0 | 0 |"]


@pytest.mark.parametrize("deviation", [1.01, math.inf, math.nan])
def test_too_far_off_fails_and_is_kept(deviation: float) -> None:
    """Also what is no number."""
    with pytest.raises(AssertionError, match="allowed 1"):
        checks.check("a", "table", deviation, 1.0)
    assert checks._made["a"].share > 1.0


def test_the_table_goes_between_the_markers(tmp_path: Path) -> None:
    """What stood there goes, what stands around it stays; a session without checks writes none."""
    guide, record = tmp_path / "guide.md", tmp_path / "last.md"
    checks.write_record(record)
    assert not record.exists()
    guide.write_text(f"before\n{checks.BEGIN}\nold\n{checks.END}\nafter\n")
    checks.check("a", "table", 0.5, 1.0)
    checks.write_record(record)
    checks.put_record(guide, record)
    text = guide.read_text()
    assert text.startswith(f"before\n{checks.BEGIN}\n| Check |")
    assert text.endswith(f"| 0.5 | 1 |\n{checks.END}\nafter\n")
    assert "old" not in text


def test_the_guide_has_the_markers_and_a_table() -> None:
    """Rows of four cells between them, each with a source."""
    _, _, rest = checks.GUIDE.read_text().partition(checks.BEGIN)
    inside, end, _ = rest.partition(checks.END)
    assert end
    rows = [row.strip("|").split(" | ") for row in inside.strip().splitlines()[2:]]
    assert len(rows) > 40
    assert all(len(row) == 4 and all(cell.strip() for cell in row) for row in rows)
