"""Spectra from files: whatever the format the same light, whatever is wrong a line and a remedy."""

import re
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from solver import columns
from solver.columns import Unreadable
from solver.experiment import Source
from solver.grid import Grid
from solver.measured import MOST_POINTS, Imported, read_spectrum
from solver.source import power_spectrum
from solver.units import LIGHT_SPEED_NM_PER_PS
from tests.checks import check

CARRIER_NM = 1552.0
CARRIER_GHZ = 1e3 * LIGHT_SPEED_NM_PER_PS / CARRIER_NM
WIDTH_GHZ = 24.0
WAVELENGTH_NM = np.round(np.linspace(1551.4, 1552.6, 601), 3)
DBM = np.round(-12.0 + 10.0 * np.log10(1e-6 + np.exp(
    -4.0 * np.log(2.0) * ((1e3 * LIGHT_SPEED_NM_PER_PS / WAVELENGTH_NM - CARRIER_GHZ) / WIDTH_GHZ)
    ** 2
)), 4)  # fmt: skip
PLAIN = [f"{x:.3f},{y:.4f}" for x, y in zip(WAVELENGTH_NM, DBM, strict=True)]
HEADED = ["Wavelength (nm),Power (dBm)", *PLAIN]


def _read(lines: list[str] | str | bytes, **options: Any) -> Imported:
    return read_spectrum("\n".join(lines) if isinstance(lines, list) else lines, **options)


def _swapped(lines: list[str], separator: str) -> list[str]:
    """Decimal commas, and another separator."""
    return [line.replace(",", separator).replace(".", ",") for line in lines]


REFERENCE = _read(HEADED, wavelength_nm=CARRIER_NM)
LINEAR = [f"{x:.3f}\t{10 ** (y / 10):.6e}" for x, y in zip(WAVELENGTH_NM, DBM, strict=True)]
BY_FREQUENCY = [
    (LIGHT_SPEED_NM_PER_PS / x, 10 ** (y / 10) * x**2)
    for x, y in zip(WAVELENGTH_NM, DBM, strict=True)
]

SAME: dict[str, tuple[list[str] | bytes, dict[str, Any], str]] = {
    "no header": (PLAIN, {}, "wavelength in nm (guessed"),
    "no header, told": (PLAIN, {"axis": "nm", "level": "dBm"}, "wavelength in nm (as asked)"),
    "descending": (HEADED[:1] + PLAIN[::-1], {}, "descends: turned round"),
    "shuffled": (PLAIN[300:] + PLAIN[:300], {}, "out of order from line 302 on: sorted"),
    "semicolons, decimal commas": (_swapped(HEADED, ";"), {}, "decimal commas"),
    "tabs, decimal commas": (_swapped(PLAIN, "\t"), {}, "separated by tabs"),
    "commas twice": (_swapped(PLAIN, ","), {}, "separated by commas, decimal commas"),
    "blanks": ([line.replace(",", "   ") for line in PLAIN], {}, "separated by blanks"),
    "quoted": ([",".join(f'"{x}"' for x in line.split(",")) for line in HEADED], {}, "from the he"),
    "more columns": ([f"{line},7.5,x" for line in PLAIN], {}, "guessed"),
    "another column": (
        [line.replace(",", ",1.5,") for line in PLAIN], {"column": 3}, "dBm (guessed"
    ),
    "CRLF and preamble": (
        "\r\n".join(["[TRACE A]", "Resolution,0.02 nm", "", *HEADED, "", ""]).encode(),
        {},
        "from the header",
    ),
    "UTF-8 with mark": ("\n".join(HEADED).encode("utf-8-sig"), {}, "from the header"),
    "UTF-16": ("\n".join(HEADED).encode("utf-16"), {}, "from the header"),
    "UTF-16 without mark": ("\n".join(HEADED).encode("utf-16-le"), {}, "from the header"),
    "Latin-1": ("\n".join(["é", *HEADED]).encode("latin-1"), {}, "line 1): read as Latin-1"),
    "minus signs": ("\n".join(HEADED).replace("-", "−").encode(), {}, "from the header"),
    "comments within": (
        [*HEADED[:300], "# paused", "", "! resumed", *HEADED[300:]], {}, "from the header"
    ),
    "a blank line after each": ([*"\n\n".join(HEADED).split("\n")], {}, "from the header"),
    "linear": (LINEAR, {}, "linear (guessed"),
    "linear in W": (["nm\tW", *LINEAR], {}, "W (from the header)"),
    "micrometres": (
        ["µm,dBm"] + [f"{x / 1e3:.6f},{y:.4f}" for x, y in zip(WAVELENGTH_NM, DBM, strict=True)],
        {},
        "wavelength in µm (from the header)",
    ),
    "THz": (
        ["Frequency (THz);mW"] + [f"{f:.9f};{p:.9e}" for f, p in BY_FREQUENCY],
        {},
        "frequency in THz (from the header)",
    ),
    "Hz": ([f"{f * 1e12:.12e} {p:.9e}" for f, p in BY_FREQUENCY], {}, "frequency in Hz (guessed"),
    "offsets in GHz": (
        [f"{f * 1e3 - CARRIER_GHZ:.6f} {p:.9e}" for f, p in BY_FREQUENCY],
        {},
        "offset from the carrier in GHz (guessed",
    ),
    "THz, but per nm": (
        [f"{f:.9f};{p / (LIGHT_SPEED_NM_PER_PS / f) ** 2:.9e}" for f, p in BY_FREQUENCY],
        {"per": "wavelength"},
        "fixed in wavelength",
    ),
    "per nm in the header": (
        ["THz,dBm/nm"]
        + [f"{LIGHT_SPEED_NM_PER_PS / x:.9f},{y:.4f}"
           for x, y in zip(WAVELENGTH_NM, DBM, strict=True)],
        {},
        "fixed in wavelength",
    ),
    "points twice": (PLAIN[:100] + PLAIN[50:], {}, "50 lines repeating a place"),
    "NaN beside": ([*PLAIN, "1552.61,nan", "1552.62,"], {}, "2 lines with no level left out"),
    "strays skipped": (
        [*PLAIN[:9], "stopped", *PLAIN[9:]], {"strays": "skip"}, "left out, line 10"
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", SAME)
def test_the_same_light_in_any_format(case: str) -> None:
    """Offsets and densities as from the plainest file, and a remark on what was recognized."""
    text, options, remark = SAME[case]
    made = _read(text, wavelength_nm=CARRIER_NM, **options)
    assert made.wavelength_nm == CARRIER_NM
    np.testing.assert_allclose(
        made.spectrum.offset_ghz, REFERENCE.spectrum.offset_ghz, atol=2e-6, rtol=0
    )
    np.testing.assert_allclose(made.spectrum.density, REFERENCE.spectrum.density, rtol=3e-6)
    assert any(remark in said for said in made.remarks), made.remarks


def test_the_light_is_that_which_was_measured() -> None:
    """A Gaussian line in dBm over nm gives the Gaussian source, and its own carrier.

    Between points 2.5 GHz apart a straight line departs from the curve by less than
    (2.5 GHz)² S″/8, 6e-3 of the top; these points are 0.25 GHz apart.
    """
    made = _read(HEADED, floor_db=55.0)
    assert made.wavelength_nm == pytest.approx(CARRIER_NM, abs=1e-3)
    grid = Grid(8192, 2.0)
    seen = power_spectrum(Source(shape="measured", measured=REFERENCE.spectrum), grid)
    pure = power_spectrum(Source(width_ghz=WIDTH_GHZ), grid)
    within = np.abs(grid.frequency_thz) < 0.07
    np.testing.assert_allclose(seen[within], pure[within], atol=2e-4 * pure.max())


def test_density_per_wavelength_becomes_density_per_frequency() -> None:
    """An analyser of fixed Δλ sees S(f) c Δλ/λ²: 13 % from end to end of 100 nm at 1550 nm."""
    nm = np.linspace(1500.0, 1600.0, 1001)
    lines = [f"{x:.6f};{1.0 / x**2:.10e}" for x in nm]
    flat = np.array(_read(["nm;W", *lines]).spectrum.density)
    source = "S(f) c Δλ/λ², the Jacobian of a fixed Δλ"
    check("density of a trace over wavelength", source, np.abs(flat - 1.0).max(), 1e-6)
    tilted = np.array(_read(["nm;W", *lines], per="frequency").spectrum.density)
    assert tilted[0] / tilted[-1] == pytest.approx((1500.0 / 1600.0) ** 2, rel=1e-5)


def test_the_carrier_is_the_centre_of_gravity() -> None:
    """Two lines of power 3 and 1, 40 GHz apart: the carrier is 10 GHz from the stronger."""
    ghz = np.arange(-100.0, 100.5, 0.5)
    power = 3.0 * np.exp(-(((ghz + 10.0) / 4.0) ** 2)) + np.exp(-(((ghz - 30.0) / 4.0) ** 2))
    lines = [f"{193.2 + f / 1e3:.6f} {p:.6e}" for f, p in zip(ghz, power, strict=True)]
    made = _read(lines)
    assert made.wavelength_nm is not None
    assert made.wavelength_nm == pytest.approx(LIGHT_SPEED_NM_PER_PS / 193.2, abs=1e-4)
    top = int(np.argmax(made.spectrum.density))
    assert made.spectrum.offset_ghz[top] == pytest.approx(-10.0, abs=0.02)


def test_a_noise_floor_is_found_and_taken_off_when_asked() -> None:
    """50 dB below the top here; without it only the light is left."""
    wide = np.linspace(1540.0, 1564.0, 4801)
    ghz = 1e3 * LIGHT_SPEED_NM_PER_PS / wide - CARRIER_GHZ
    light = np.exp(-4.0 * np.log(2.0) * (ghz / WIDTH_GHZ) ** 2)
    lines = [f"{x:.4f},{10 * np.log10(s + 1e-5):.3f}" for x, s in zip(wide, light, strict=True)]
    made = _read(lines)
    assert made.floor_db == pytest.approx(50.0, abs=0.11)
    assert any("take a noise floor of 49.9 dB off" in said for said in made.remarks)
    assert made.spectrum.span_ghz > 1000.0
    clean = _read(lines, floor_db=made.floor_db)
    assert clean.floor_db is None
    # Light is left where it stands above the floor as suggested, rounded to a tenth of a dB.
    lowest = 10.0**-4.99 - 1e-5
    assert clean.spectrum.span_ghz == pytest.approx(12.0 * np.log2(1 / lowest) ** 0.5, abs=2.0)
    assert any("taken off, 0.117 % of the power" in said for said in clean.remarks)


def test_a_million_lines_are_thinned_with_their_power_kept() -> None:
    """The integral of the straight lines through the points, as a whole and bin by bin."""
    mhz = np.arange(-400_000, 600_000)
    smooth = 1e6 * np.exp(-((mhz / 30e3) ** 2))
    counts = np.random.default_rng(7).uniform(0.5, 1.5, mhz.size) * smooth
    counts = np.rint(counts).astype(int)
    text = "\n".join(map("{} {}".format, mhz.tolist(), counts.tolist()))
    made = _read(text, axis="MHz")
    seen, thin = np.array(made.spectrum.offset_ghz), np.array(made.spectrum.density)
    assert seen.size == MOST_POINTS
    assert any("points thinned to 2048" in said for said in made.remarks)
    scale = np.trapezoid(counts, mhz / 1e3) / np.trapezoid(thin, seen)
    width = int(1e3 * (seen[2] - seen[1]))
    for place in range(900, 1100, 20):
        first = np.searchsorted(mhz, 1e3 * seen[place] - width / 2)
        mean = counts[first : first + width].mean()
        assert scale * thin[place] == pytest.approx(mean, abs=2.0 * smooth.max() / width)


def test_a_gap_is_named_and_bridged_or_refused() -> None:
    """Its ends in the unit of the file, and their lines."""
    lines = HEADED[:200] + HEADED[260:]
    made = _read(lines)
    said = next(said for said in made.remarks if "gap" in said)
    assert "1551.796 nm to 1551.918 nm (lines 200 and 201): bridged" in said
    with pytest.raises(Unreadable, match=r"lines 200 and 201\): measure it again") as caught:
        _read(lines, gaps="refuse")
    assert caught.value.where == "gaps"


NOISY = [*LINEAR[:40], "1551.480\t-1.5e-9", *LINEAR[41:]]


def test_negative_powers_are_refused_or_taken_as_zero() -> None:
    """With the line and the way out."""
    with pytest.raises(Unreadable, match=r"negative \(-1.5e-09\) on line 41: have .* taken as 0"):
        _read(NOISY)
    made = _read(NOISY, negative="zero")
    assert made.spectrum.density.count(0.0) == 1
    assert any("negative powers taken as 0 on line 41" in said for said in made.remarks)


REFUSED: dict[str, tuple[list[str] | bytes, dict[str, Any], str, str]] = {
    "empty": (b"", {}, "", "the file is empty"),
    "blank": (b" \n\n", {}, "", "the file is empty"),
    "invisible": (b"\xff\xfe\x1c\x00", {}, "", "the file is empty"),
    "one column": (["1550.1", "1550.2"], {}, "", "line 1, “1550.1”, holds one number where 2"),
    "no such column": (PLAIN, {"column": 4}, "column", "holds 2 numbers where 4 are needed"),
    "prose": (["dear colleague"], {}, "", "none of the first 1 lines holds two numbers"),
    "text within": (
        [*PLAIN[:9], "aborted by user"], {}, "strays", "line 10, “aborted by user”, is not a point"
    ),
    "two points": (PLAIN[:2], {}, "", "the file holds 2 points"),
    "binary": (b"\x89HDF\r\n\x1a\n\0\0\0\0\0\0", {}, "", "not text"),
    "one long line": (b"1550,1," * 1000, {}, "", "line 1 is longer than 4096 characters"),
    "ambiguous commas": (["1550,12,3"] * 4, {}, "", "line 1, “1550,12,3”, can be read in two ways"),
    "wrong unit": (PLAIN, {"axis": "THz"}, "axis", "cannot be frequency in THz: choose nm"),
    "no unit": (["1 2", "3 4", "5 6"], {}, "axis", "from 1 to 5 are no wavelengths"),
    "one wild value": ([*PLAIN, "15526,-80"], {}, "axis", "or mend line 602, which has 15526"),
    "no power": (["1550 -inf", "1551 -inf", "1552 -inf"], {}, "", "holds no power"),
    "infinite power": (["1550 -9", "1551 inf", "1552 -9"], {}, "", "line 2: the level is infinite"),
    "no levels": (["1550 nan"] * 4, {}, "", "0 points (4 lines with no level left out, the first"),
    "wild level": (
        ["nm dBm", "1550 -9", "1551 1e6", "1552 -9"], {}, "level", "line 3: a level of 1e+06 dB"
    ),
    "one place": (["1550 1", "1550 2", "1550 3"], {}, "axis", "at 1 different places"),
    "carrier elsewhere": (
        PLAIN, {"wavelength_nm": 1310.0}, "wavelength_nm", "use 1552.0000 nm, its centre"
    ),
    "floor above all": (PLAIN, {"floor_db": 0.0}, "floor_db", "put it lower"),
    "offsets per nm": (
        ["-9 1", "0 2", "9 1"], {"per": "wavelength"}, "wavelength_nm", "needs the carrier"
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", REFUSED)
def test_refusals_say_where_and_what_to_do(case: str) -> None:
    """The option that would help, and a sentence with the line and the remedy."""
    text, options, where, message = REFUSED[case]
    with pytest.raises(Unreadable, match=re.escape(message)) as caught:
        _read(text, **options)
    assert caught.value.where == where


def test_files_without_end_are_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Lines are counted before they are read, strays before they are remembered."""
    monkeypatch.setattr(columns, "MOST_LINES", 500)
    with pytest.raises(Unreadable, match="more than 500 lines"):
        _read(PLAIN)
    monkeypatch.setattr(columns, "MOST_LINES", 5000)
    monkeypatch.setattr(columns, "MOST_STRAYS", 20)
    with pytest.raises(Unreadable, match="more than 20 lines, from line 4 on, are no points"):
        _read(PLAIN[:3] + ["x"] * 30, strays="skip")


FIELD = st.sampled_from(["1550", "1551.5", "-3", "1e-9", "nan", "-inf", "", "x", "0", "1552,5"])
LINE = st.builds(
    lambda fields, separator: separator.join(fields),
    st.lists(FIELD, max_size=4),
    st.sampled_from([",", ";", "\t", " "]),
)


@settings(max_examples=150, deadline=None, derandomize=True, database=None)
@given(
    st.binary(max_size=60) | st.lists(LINE, max_size=9).map(lambda lines: "\n".join(lines)),
    st.sampled_from(["auto", "nm", "GHz"]),
    st.sampled_from(["auto", "dBm", "linear"]),
    st.sampled_from(["refuse", "skip"]),
    st.none() | st.floats(0.0, 90.0),
)
def test_any_file_is_a_spectrum_or_refused(
    data: bytes | str, axis: Any, level: Any, strays: Any, floor_db: float | None
) -> None:
    """Never a crash, never a spectrum that a source would not take."""
    try:
        made = read_spectrum(data, axis=axis, level=level, strays=strays, floor_db=floor_db)
    except Unreadable:
        return
    assert Source(shape="measured", measured=made.spectrum).full_width_ghz > 0.0
