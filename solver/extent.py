"""How much time and how wide a band an experiment needs, and the grid chosen from that.

Rules of thumb from the parameters alone. What decides in the end is measured on the light: the
grid follows it (:mod:`solver.passage`), and what does not fit is flagged.
"""

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

from solver.quantity import Contradiction
from solver.receiving import Ensemble, Receiver
from solver.sending import Amplifier, Launch, Relation, Shaper, Source
from solver.span import Span
from solver.units import attenuation_per_km, effective_length_km, ratio_from_db

NARROWEST_GHZ = 1e-9
"""Stands for the width of a spectrum that is a line."""
COHERENCE_TIMES = 160.0
"""Times over the source's width that a window holds, so that a realization says something."""
BAND_IN_RMS = 4.8
"""Half-width of a spectrum where it has fallen to 1e-5, in rms widths: measured from 0.1 to 1 W
on Gaussian light of 20 GHz in 10 km of normal dispersion."""
CLEAR = 1.15
"""The band is this much wider, so that its edges stay empty."""
FEWEST_SAMPLES, MOST_SAMPLES = 256, 2**22
LONGEST_WINDOW_PS = 1e7
MOST_GAIN_DB = 300.0
BRIGHTEST_W = 1e30
THERMAL_SLOPE = 1.5
"""Rms rate of a Kerr phase of thermal light, over mean phase times rms width: about √2."""


class Path(Protocol):
    """The stages of an experiment."""

    @property
    def source(self) -> Source: ...
    @property
    def relation(self) -> Relation: ...
    @property
    def shaper(self) -> Shaper: ...
    @property
    def booster(self) -> Amplifier: ...
    @property
    def launch(self) -> Launch: ...
    @property
    def line(self) -> Sequence[Span]: ...
    @property
    def preamplifier(self) -> Amplifier: ...
    @property
    def receiver(self) -> Receiver: ...
    @property
    def ensemble(self) -> Ensemble: ...


@dataclass(frozen=True)
class Need:
    """What one effect asks of the window (unit ps) or of the band to either side (GHz)."""

    title: str
    value: float
    unit: str


@dataclass(frozen=True)
class Suggestion:
    """A grid, and what asked for it: every need, the largest of each unit decides."""

    window_ps: float
    samples: int
    needs: tuple[Need, ...]


def spread_ps(path: Path, half_band_ghz: float) -> float:
    """Largest spread of arrival times that the line gives to light of a band, along its way, ps.

    From the group delay β2 Ω + β3 Ω²/2 + β4 Ω³/6 of the spans so far, whose dispersions may
    cancel; delays between the components and three times the mean polarization-mode dispersion
    come on top.
    """
    reach = 2e-3 * math.pi * half_band_ghz
    second = third = fourth = delays = mode_squared = largest = 0.0
    for span in path.line:
        length = span.length_km
        second += span.beta2(path.source.wavelength_nm) * length
        third += span.beta3_ps3_per_km * length
        fourth += span.beta4_ps4_per_km * length
        delays += abs(span.delay_ps_per_km) * length
        delays += abs(span.delay_slope_ps2_per_km) * length * reach
        mode_squared += span.pmd_ps_per_sqrt_km**2 * length
        spread = 2 * abs(second) * reach + abs(third) * reach**2 / 2 + abs(fourth) * reach**3 / 3
        largest = max(largest, spread + delays + 3.0 * math.sqrt(mode_squared))
    return largest


def broadened_ghz(path: Path) -> float:
    """Rms width of the spectrum at the end of the line, at most, GHz.

    In each span the Kerr phase adds its rms rate, until the energy that the Kerr effect can turn
    into bandwidth is used up, β2 ω² ≤ γ c P (conservation of the Hamiltonian, as an estimate).
    """
    start = 2e-3 * math.pi * path.source.coherence_width_ghz / math.sqrt(8.0 * math.log(2.0))
    squared = start**2
    launch = path.launch
    power_w = 1e-3 * launch.total_power_mw
    for span in path.line:
        # No light survives such gains anyway; the arithmetic has to.
        most_db_per_km = MOST_GAIN_DB / span.length_km
        net_db_per_km = max(span.loss_db_per_km - span.gain_db_per_km, -most_db_per_km)
        own, other = span.kerr_coefficients()
        shares = (launch.share_1, 1.0 - launch.share_1)
        factor = max(own * a + other * b for a, b in (shares, shares[::-1]))
        length_km = effective_length_km(span.length_km, net_db_per_km)
        through = math.exp(-attenuation_per_km(net_db_per_km) * span.length_km)
        rate = span.gamma_per_w_km * factor * power_w
        slope = THERMAL_SLOPE * rate * length_km * start
        beta2 = abs(span.beta2(path.source.wavelength_nm))
        brightest = rate * max(1.0, through)
        squared += min(slope * slope, brightest / beta2 if beta2 else math.inf)
        power_w = min(power_w * through * ratio_from_db(-span.joint_loss_db), BRIGHTEST_W)
    return 500.0 / math.pi * math.sqrt(squared)


def needs(path: Path) -> Iterator[Need]:
    """What each effect asks for."""
    coherent_ghz = max(path.source.coherence_width_ghz, NARROWEST_GHZ)
    ensemble, receiver = path.ensemble, path.receiver
    rms_ghz = broadened_ghz(path)
    yield Need("coherence times of the source", 1e3 * COHERENCE_TIMES / coherent_ghz, "ps")
    yield Need("spread by the line", 4.0 * spread_ps(path, BAND_IN_RMS * rms_ghz / 2), "ps")
    delay_ps = abs(path.launch.skew_ps)
    if path.relation.kind == "delayed":
        delay_ps += abs(path.relation.delay_ps)
    yield Need("longest delay and lag", 2.0 * (delay_ps + ensemble.max_lag_ps), "ps")
    if path.relation.kind == "hilbert" and path.relation.notch_ghz:
        yield Need("notch of the sign step", 8e3 / path.relation.notch_ghz, "ps")
    if path.shaper.resolution_ghz:
        yield Need("resolution of the shaper", 2e3 / path.shaper.resolution_ghz, "ps")

    yield Need("source", 2.0 * path.source.full_width_ghz, "GHz")
    yield Need("spectrum broadened by the Kerr effect", BAND_IN_RMS * rms_ghz * CLEAR, "GHz")
    for name, band_ghz in (
        ("band-pass of the booster", path.booster.bandpass_ghz),
        ("band-pass of the preamplifier", path.preamplifier.bandpass_ghz),
    ):
        if band_ghz is not None:
            yield Need(name, band_ghz, "GHz")
    for name, shape, bandwidth_ghz in (
        ("receiver", receiver.filter, receiver.bandwidth_ghz),
        ("digitizer", receiver.digitizer_filter, receiver.digitizer_bandwidth_ghz),
    ):
        if shape != "none":
            yield Need(f"memory of the {name}", 8e3 / bandwidth_ghz, "ps")
            yield Need(f"bandwidth of the {name}", 2.0 * bandwidth_ghz, "GHz")
    if ensemble.wall_smoothing_ps:
        yield Need("smoothing before walls are counted", 1e3 / ensemble.wall_smoothing_ps, "GHz")


def suggest(paths: Iterable[Path]) -> Suggestion:
    """The smallest grid that suits all of these experiments, which share it.

    Raises Contradiction where that is larger than any allowed.
    """
    largest: dict[str, Need] = {}
    for path in paths:
        for need in needs(path):
            known = largest.get(need.title)
            if known is None or need.value > known.value:
                largest[need.title] = need
    found = sorted(largest.values(), key=lambda need: (need.unit != "ps", -need.value))
    longest = next(need for need in found if need.unit == "ps")
    widest = next(need for need in found if need.unit == "GHz")
    if longest.value > LONGEST_WINDOW_PS / 2.0:
        raise Contradiction(
            "ensemble.grid",
            f"no window is long enough for the {longest.title}, which takes "
            f"{longest.value:.3g} ps: at most half of {LONGEST_WINDOW_PS:g} ps is allowed",
        )
    window_ps = 2.0 ** math.ceil(math.log2(longest.value))
    wanted = 2e-3 * widest.value * window_ps
    if wanted > MOST_SAMPLES:
        raise Contradiction(
            "ensemble.grid",
            f"no grid is large enough: {longest.title} takes {longest.value:.3g} ps and "
            f"{widest.title} ±{widest.value:.3g} GHz, which is {wanted:.3g} samples; at most "
            f"{MOST_SAMPLES} are allowed: make one of them smaller",
        )
    samples = max(2 ** math.ceil(math.log2(wanted)), FEWEST_SAMPLES)
    return Suggestion(window_ps, samples, tuple(found))
