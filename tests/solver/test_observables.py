"""Polarization, distributions, widths, walls and invariants against closed forms.

All light here is thermal and, but where it says so, without Kerr effect.
"""

from collections.abc import Mapping
from functools import cache

import numpy as np
import pytest

from solver.accumulators import Blocks, Estimate, Means, sums_and_squares
from solver.ensemble import Bench, _picture, pilot
from solver.experiment import Experiment, Receiver, Span, with_changes
from solver.features import domain_features, power_densities
from solver.grid import Grid
from solver.invariants import drifts
from solver.layout import LARGEST_INTENSITY, LARGEST_QUADRATURE, Layout
from solver.planning import scales
from solver.statistics import SPECTRA, Estimators
from solver.task import Leg
from solver.thermal import intensity_density, quadrature_density, sum_density
from solver.widths import half_maximum_width
from tests import reference
from tests.checks import check
from tests.reference import Glass

GOODMAN = "Goodman, Statistical Optics, ch. 4"
RICE = "own derivation after Rice, Bell Syst. Tech. J. 24, 46, 1945"
SPHERE = "Brosseau, Fundamentals of Polarized Light, from memory"
WALLS = "Haelterman and Sheppard 1994, own derivation for cross/self = 3"

WIDTH_GHZ = 24.0
SIGMA_GHZ = WIDTH_GHZ / np.sqrt(8.0 * np.log(2.0))
SIGMA_RAD_PER_PS = 2e-3 * np.pi * SIGMA_GHZ
SMALL = {
    "ensemble.window_ps": 4096.0,
    "ensemble.samples": 2048,
    "ensemble.distances": 2,
    "ensemble.max_lag_ps": 200.0,
    "ensemble.precision": "double",
    "line.*.gamma_per_w_km": 0.0,
    "line.*.dispersion_ps_per_nm_km": 0.0,
    "source.width_ghz": WIDTH_GHZ,
}


def _found(changes: Mapping[str, object], count: int = 64) -> Estimators:
    """Estimates of an experiment whose line needs no more than the steps expected."""
    bench = Bench(with_changes(Experiment(), {**SMALL, **changes}))
    numbers = range(count)
    seen = bench.follow(bench.passage.fields(numbers), numbers, bench.passage.expected())
    rows, linear = bench.features(seen)[0]
    layout = bench.layouts[0]
    blocks, means = Blocks(layout.block_features), Means(layout.mean_features)
    blocks.add(rows)
    means.add(count, sums_and_squares(linear))
    return Estimators(layout, blocks, means, 0.0)


@cache
def _independent() -> Estimators:
    return _found({})


def _agrees(name: str, source: str, found: Estimate, expected: object) -> None:
    """Every value within four standard errors."""
    value, error = found
    check(name, source, np.max(np.abs(value - expected) / error), 4.0, "σ")


def _fits(name: str, found: Estimate, expected: np.ndarray, least: float) -> None:
    """A histogram against a density: mean square of the deviations over their errors.

    Only where the density is above ``least``: below, bins have too few counts for their errors.
    """
    used = expected > least
    pulls = (found.value[used] - expected[used]) / found.standard_error[used]
    assert np.count_nonzero(used) > 20
    assert 0.5 < np.mean(pulls**2) < 1.7
    check(name, GOODMAN, np.abs(pulls).max(), 5.0, "σ")


def test_the_sphere_is_covered_evenly() -> None:
    """Independent components of equal power: every polarization is as likely (Brosseau,
    Fundamentals of Polarized Light, on unpolarized thermal light; from memory)."""
    found = _independent()["stokes"]
    assert found.value.shape == (24, 48)
    np.testing.assert_allclose(found.value.mean(), 1.0 / (4.0 * np.pi), rtol=1e-9)
    pulls = (found.value - 1.0 / (4.0 * np.pi)) / found.standard_error
    assert 0.85 < np.mean(pulls**2) < 1.2
    check(
        "thermal light evenly on the Poincaré sphere, bins", SPHERE, np.abs(pulls).max(), 5.5, "σ"
    )


def test_identical_components_are_one_point_of_the_sphere() -> None:
    """u = v is S2 = S0; the sphere has all its light there, and the degree is one."""
    found = _found({"relation.kind": "identical"}, 4)
    value = found["stokes"].value
    layout = found.layout
    assert value[11:13].sum() == pytest.approx(value.sum())
    at = np.flatnonzero(value.sum(axis=0))
    np.testing.assert_allclose(layout.sphere_azimuth_deg[at], 90.0, atol=4.0)
    np.testing.assert_allclose(found["polarization_degree"].value, 1.0, rtol=1e-9)
    np.testing.assert_allclose(found["stokes_means"].value, [[0, 1, 0], [0, 1, 0]], atol=1e-9)


def test_degree_of_polarization() -> None:
    """0 for independent components, √ρ where they share ρ of their power (Goodman, Statistical
    Optics, ch. 4: of two equal parts of coherence μ, |μ|)."""
    means = _independent()["stokes_means"]
    _agrees("mean Stokes parameters of unpolarized light", GOODMAN, means, 0.0)
    degree = _independent()["polarization_degree"]
    assert np.all(degree.value < 4.0 * means.standard_error.max())
    # Over no more than a sample light is polarized; over all of the window it is as above.
    assert _independent()["local_polarization_degree"].value[0] > 0.95
    whole = _found({"ensemble.wall_smoothing_ps": 4096.0}, 4)["local_polarization_degree"]
    assert whole.value[0] < 0.3
    shared = _found({"relation.kind": "partial", "relation.correlation": 0.36})
    name = "degree of polarization of partly shared light"
    _agrees(name, GOODMAN, shared["polarization_degree"], 0.6)
    _agrees(name, GOODMAN, shared["stokes_means"], [[0.0, 0.6, 0.0], [0.0, 0.6, 0.0]])


def test_intensities_and_fields_have_the_distributions_of_thermal_light() -> None:
    """e^{−x} for each, Gamma(2) for the sum, a Gaussian for the field (Goodman, ch. 4)."""
    found = _independent()
    edges = np.linspace(0.0, LARGEST_INTENSITY, 61)
    _fits("intensity of thermal light, e^{−x}", found["intensity1"], intensity_density(edges), 0.02)
    _fits("intensity of thermal light, e^{−x}", found["intensity2"], intensity_density(edges), 0.02)
    _fits("sum of two intensities, Gamma(2)", found["intensity_sum"], sum_density(edges, 0.5), 0.02)
    ends = np.linspace(-LARGEST_QUADRATURE, LARGEST_QUADRATURE, 61)
    _fits("field quadratures, Gaussian", found["quadratures"], quadrature_density(ends), 0.01)
    unequal = _found({"launch.share_1": 0.25})
    _fits(
        "sum of two unequal intensities", unequal["intensity_sum"], sum_density(edges, 0.25), 0.02
    )


def test_the_closed_densities_are_densities() -> None:
    """They integrate to one, have the means they should, and join up at equal shares."""
    edges = np.linspace(0.0, 60.0, 60_001)
    centres = (edges[1:] + edges[:-1]) / 2.0
    for density in (intensity_density(edges), *(sum_density(edges, s) for s in (0.5, 0.2, 0.0))):
        assert np.sum(density) * 1e-3 == pytest.approx(1.0, abs=1e-9)
        assert np.sum(centres * density) * 1e-3 == pytest.approx(1.0, abs=1e-6)
    x = centres[:8000]
    np.testing.assert_allclose(sum_density(edges, 0.5)[:8000], 4 * x * np.exp(-2 * x), atol=1e-6)
    near = sum_density(edges, 0.4994) - sum_density(edges, 0.5)
    assert np.abs(near).max() < 1e-5
    ends = np.linspace(-8.0, 8.0, 121)
    assert np.sum(quadrature_density(ends)) * 16 / 120 == pytest.approx(1.0, abs=1e-6)


def test_moments_and_powers_along_the_line() -> None:
    """⟨I²⟩ = 2⟨I⟩² at every distance, and powers fall as the loss says."""
    found = _independent()
    for name in ("second_moment1", "second_moment2"):
        _agrees("⟨I²⟩/⟨I⟩² = 2 at every distance", GOODMAN, found[name], 2.0)
    left = 10.0 ** (-0.024 * 8.0 * np.array([0.0, 0.5, 1.0]))
    for name in ("power1", "power2"):
        value, error = found[name]
        np.testing.assert_allclose(value / value[0], left, rtol=1e-9)
        assert abs(value[0] - 0.1) < 4.0 * error[0]


@pytest.mark.parametrize(
    ("shape", "time_ps"),
    [("gaussian", 1e3 * np.sqrt(2.0 * np.log(2.0) / np.pi) / 24.0), ("rectangular", 1e3 / 24.0)],
)
def test_coherence_time(shape: str, time_ps: float) -> None:
    """0.664/Δν of a Gaussian spectrum, 1/Δν of a rectangular one (Goodman, Statistical Optics,
    table 5-1); the planning scale has it without noise."""
    found = _found({"source.shape": shape})["coherence_time_ps"]
    source = "Goodman, Statistical Optics, table 5-1"
    _agrees(f"coherence time of a {shape} spectrum", source, found, time_ps)
    assert np.all(found.standard_error < 0.03 * time_ps)
    experiment = with_changes(Experiment(), {**SMALL, "source.shape": shape})
    assert scales(experiment).coherence_time_ps == pytest.approx(time_ps, rel=0.01)


def test_spectral_widths_and_what_an_analyser_adds() -> None:
    """Gaussians: full width 2.355 rms; those of source and analyser add in quadrature."""
    plain, seen = _independent(), _found({"receiver.analyser_ghz": 18.0})
    source = "the Gaussian given to the source"
    _agrees("rms width of a spectrum", source, plain["spectral_rms_ghz"], SIGMA_GHZ)
    _agrees("full width of a spectrum", source, plain["spectral_fwhm_ghz"], WIDTH_GHZ)
    assert np.all(plain["spectral_fwhm_ghz"].standard_error < 0.05 * WIDTH_GHZ)
    name = "full width behind a spectrum analyser"
    _agrees(name, "widths of Gaussians add in quadrature", seen["spectral_fwhm_ghz"], 30.0)
    rms = np.sqrt(plain["spectral_rms_ghz"].value ** 2 + 18.0**2 / (8.0 * np.log(2.0)))
    np.testing.assert_allclose(seen["spectral_rms_ghz"].value, rms, rtol=1e-9)
    offset = seen.layout.offset_ghz
    for index, name in enumerate(SPECTRA):
        shown = seen[name].value
        np.testing.assert_allclose(shown.sum(), plain[name].value.sum(), rtol=1e-9)
        assert reference.rms_width(shown, offset) == pytest.approx(rms[index], rel=2e-3)
    np.testing.assert_allclose(
        seen["coherence_time_ps"].value, plain["coherence_time_ps"].value, rtol=1e-12
    )


def test_full_widths_of_known_shapes() -> None:
    """Without noise: a Gaussian and a pair of lines off the carrier; none where an axis is too
    coarse or too short; errors grow as those of the bins do."""
    axis = np.arange(-200.0, 200.0, 0.5)

    def width(density: np.ndarray, coherence: float, error: float = 0.01) -> Estimate:
        return half_maximum_width(Estimate(density, error * density), 0.5, coherence)

    gaussian = np.exp(-4.0 * np.log(2.0) * ((axis - 7.0) / 24.0) ** 2)
    found = width(gaussian, 36.1)
    assert found.value[0] == pytest.approx(24.0, rel=2e-3)
    wider = width(gaussian, 36.1, 0.02)
    assert wider.standard_error[0] == pytest.approx(2.0 * found.standard_error[0])
    pair = np.exp(-(((np.abs(axis) - 40.0) / 4.0) ** 2))
    assert width(pair, 14.0).value[0] == pytest.approx(80.0 + 8.0 * np.sqrt(np.log(2.0)), rel=0.01)
    for density, coherence in ((gaussian, 1.9), (np.ones_like(axis), 300.0)):
        assert np.isnan(width(density, coherence).value[0])


def test_an_analyser_as_wide_as_the_axis_loses_light_but_makes_none() -> None:
    """Its axis has ends that do not meet: light at one of them does not come in at the other."""
    layout = Layout.of(Experiment().ensemble, Receiver(analyser_ghz=60.0))
    time_ps = layout.grid.time_ps
    field = np.exp(-2j * np.pi * 1966 / layout.grid.window_ps * time_ps) * np.ones((1, 2, 1))
    shown = power_densities(field, layout)[0][0, : layout.frequency_bins]
    at = layout.offset_ghz
    assert shown[at > 200.0].sum() > 0.5 * shown.sum()
    assert shown[at < -150.0].max() < 1e-9 * shown.max()


@pytest.mark.parametrize("share", [0.5, 0.2])
def test_walls_of_thermal_light(share: float) -> None:
    """Rate and width of walls without smoothing: half the rms angular width, and 2 over it, for
    components alike (own derivation from Rice's formula, in solver/thermal.py)."""
    changes = {"launch.share_1": share, "ensemble.wall_smoothing_ps": 0.0}
    found = _found({**changes, "ensemble.samples": 8192}, 48)
    known = scales(with_changes(Experiment(), {**SMALL, **changes}))
    name = "walls of thermal light, rate"
    _agrees(name, RICE, found["walls_per_ns"], known.thermal_walls_per_ns)
    _agrees(name, RICE, found["mean_duration_ps"], 1e3 / known.thermal_walls_per_ns)
    if share == 0.5:
        assert known.thermal_walls_per_ns == pytest.approx(500.0 * SIGMA_RAD_PER_PS, rel=1e-3)
        assert known.thermal_wall_ps == pytest.approx(2.0 / SIGMA_RAD_PER_PS, rel=1e-3)
        width = found["wall_width_ps"]
        _agrees("walls of thermal light, width", RICE, width, known.thermal_wall_ps)
        assert found["wall_width_ps"].standard_error[0] < 0.03 * known.thermal_wall_ps
    else:
        assert np.isnan(known.thermal_wall_ps)
    # Each is counted on the grid that the light is on, which holds all of it here.
    _agrees(name, RICE, found["walls_along"], known.thermal_walls_per_ns)
    assert np.all(np.isfinite(found["duration_along"].value))


def test_contrast_correlation_is_that_of_the_contrast() -> None:
    """Even, one at its peak, and what numpy makes of the same light, worked out directly."""
    changes = {**SMALL, "ensemble.wall_smoothing_ps": 0.0}
    bench = Bench(with_changes(Experiment(), changes))
    field = bench.passage.fields(range(64))
    found = _found(changes)["contrast_correlation"]
    s0, s1, _, _ = np.moveaxis(reference.stokes(field), 1, 0)
    samples = field.shape[2]
    contrast = s1 / s0
    spread = contrast - contrast.mean()
    step = 4096.0 / samples
    middle = len(found.value) // 2
    np.testing.assert_allclose(found.value, found.value[::-1])
    assert found.value[middle] == pytest.approx(1.0)
    for steps in (1, 3, 8):
        covariance = np.mean(spread * np.roll(spread, steps, axis=1)) / np.mean(spread**2)
        place = middle + round(steps * step / 2.0)
        assert found.value[place] == pytest.approx(covariance, abs=3e-3)
    # C is uniform on [−1, 1] for independent components of equal power.
    assert abs(np.mean(contrast**2) - 1.0 / 3.0) < 0.01


def test_wall_width_of_an_exact_pair() -> None:
    """2/|dC/dt| = 1/κ, where C = 2T/(1 + T²) with T = tanh κt, as planning foretells."""
    glass = Glass(1.0, beta2=20.0, gamma=2.0, own=1.0, other=3.0)
    power_w = 0.1
    grid = Grid(4096, 0.25)
    time_ps = reference.time_axis(grid.samples, grid.time_step_ps)
    field = reference.domain_walls(time_ps, 0.0, glass, np.sqrt(power_w), 512.0)[None]
    changes = {"window_ps": 1024.0, "samples": 4096, "wall_smoothing_ps": 0.0}
    ensemble = Experiment().ensemble.model_copy(update=changes)
    walls, _, _ = domain_features(np.abs(field) ** 2, grid, Layout.of(ensemble))
    line = {"line": [glass.span().model_dump()], "launch": {"total_power_mw": 1e3 * power_w}}
    known = scales(Experiment.model_validate(line))
    assert known.wall_closed_form_ps == pytest.approx(np.sqrt(20.0 / (2.0 * power_w)))
    assert walls[0, 0] == 2
    off = walls[0, 1] / 2 / known.wall_closed_form_ps - 1.0
    check("width of an exact polarization domain wall", WALLS, abs(off), 1e-3)


def test_scales_of_the_headline() -> None:
    """Lengths worked out by hand; no closed wall for the Manakov coupling."""
    experiment = with_changes(Experiment(), {"launch.total_power_mw": 100.0})
    known = scales(experiment)
    span = experiment.line[0]
    beta2 = span.beta2(experiment.source.wavelength_nm)
    time_ps = 1e3 * np.sqrt(2.0 * np.log(2.0) / np.pi) / experiment.source.width_ghz
    rate = span.gamma_per_w_km * 8 / 9 * 0.1
    assert known.coherence_time_ps == pytest.approx(time_ps, rel=1e-3)
    assert known.dispersion_length_km == pytest.approx(time_ps**2 / beta2, rel=2e-3)
    assert known.nonlinear_length_km == pytest.approx(1.0 / rate)
    assert known.n_squared == pytest.approx(time_ps**2 / beta2 * rate, rel=2e-3)
    assert known.healing_time_ps == pytest.approx(np.sqrt(beta2 / rate))
    alpha = 0.24 * np.log(10.0) / 10.0
    assert known.nonlinear_phase_rad == pytest.approx(rate * (1 - np.exp(-8 * alpha)) / alpha)
    assert np.isnan(known.wall_closed_form_ps)
    dark = with_changes(experiment, {"line.*.gamma_per_w_km": 0.0})
    assert scales(dark).nonlinear_length_km == np.inf


KERR = {
    "line.*.gamma_per_w_km": 2.5,
    "line.*.dispersion_ps_per_nm_km": -13.0,
    "launch.total_power_mw": 150.0,
    "ensemble.samples": 1024,
}


def test_a_lossless_line_keeps_its_invariants() -> None:
    """Energies to rounding, momentum to what the edges of the band hold, which the steps leave
    alone; the Hamiltonian by the order of the splitting."""
    changes = {**SMALL, **KERR, "line.*.loss_db_per_km": 0.0}
    changes |= {"line.*.coupling": "linear_birefringent"}
    bench = Bench(with_changes(Experiment(), changes))
    passage = bench.passage
    launched = passage.fields(range(2))
    made = []
    for steps in (40, 80, 160):
        trip = passage.travel(launched, (Leg(2048, steps),) * 2, guard=0.0)
        sections = passage.track(trip.field.shape[2]).sections
        found = drifts(sections, launched, trip.field, 4096.0)
        assert max(found.energy_1, found.energy_2, found.energy) < 1e-11
        assert found.momentum < 1e-8
        assert found.note == ""
        made.append(found.hamiltonian)
    assert passage.scheme.order == 2
    orders = np.log2(np.divide(made[:-1], made[1:]))
    name = "drift of the Hamiltonian by the order of the splitting"
    check(name, "symmetric splitting, order 2", np.abs(orders - 2.0).max(), 0.1)
    spoilt = drifts(sections, launched, 1.01 * trip.field, 4096.0)
    assert spoilt.energy == pytest.approx(0.0201, rel=1e-3)
    assert spoilt.hamiltonian > 0.02


def test_what_a_line_does_not_keep_is_not_a_number() -> None:
    """Loss: energies and momentum after it, no Hamiltonian. Turned axes: only the sum. Unlike
    losses: each energy without coupling of the two, no momentum."""
    for extra, kept, words in (
        ({}, ("energy_1", "energy_2", "energy", "momentum"), "loss"),
        ({"line.0.axes_deg": 20.0}, ("energy", "momentum"), "axes"),
        ({"line.0.loss_difference_db_per_km": 0.3}, ("energy_1", "energy_2"), "different loss"),
        ({"line.0.joint_loss_db": 1.0}, ("energy_1", "energy_2", "energy", "momentum"), "loss"),
    ):
        bench = Bench(with_changes(Experiment(), {**SMALL, **KERR, **extra}))
        launched = bench.passage.fields(range(2))
        trip = bench.passage.travel(launched, (Leg(1024, 200),) * 2)
        sections = bench.passage.track(trip.field.shape[2]).sections
        found = vars(drifts(sections, launched, trip.field, 4096.0))
        for name, value in found.items():
            if name in kept:
                assert value < 1e-3, name
            elif name != "note":
                assert np.isnan(value), name
        assert words in str(found["note"])


def test_the_map_shows_the_polarization_of_settled_fields() -> None:
    """Its last row is S1, S2 and S3 over S0 of the field at the end, on a coupling that turns
    the phases of the components apart."""
    changes = {**SMALL, **KERR, "line.*.coupling": "isotropic_circular"}
    bench = Bench(with_changes(Experiment(), changes))
    schedule = (Leg(1024, 300),) * 2
    picture, outcome = _picture(bench.passage, schedule)
    assert outcome.kind == "completed"
    assert picture.data.shape[0] == 5
    field = bench.passage.travel(bench.passage.fields(range(1)), schedule).field[0]
    columns = picture.data.shape[2]
    s0, s1, s2, s3 = reference.stokes(field).reshape(4, columns, -1).mean(axis=2)
    for layer, values in ((0, s1), (3, s2), (4, s3)):
        shown = picture.data[layer, -1] / 127.5 - 1.0
        np.testing.assert_allclose(shown, values / s0, atol=0.02)


def test_a_band_pass_before_the_receiver_sees_settled_fields() -> None:
    """Moments under way depend on phases there: those at the end are those of the end's field."""
    changes = {**SMALL, **KERR, "preamplifier.bandpass_ghz": 30.0}
    changes |= {"line.*.coupling": "uncoupled"}
    bench = Bench(with_changes(Experiment(), changes))
    numbers = range(3)
    seen = bench.follow(bench.passage.fields(numbers), numbers, (Leg(1024, 200),) * 2)
    detection = bench.detections[0]
    expected = detection.moments(detection.sight(seen.trip.field), numbers)
    np.testing.assert_allclose(seen.moments[0][:, -1], expected, rtol=1e-9)


def test_the_pilot_measures_drifts_on_the_way() -> None:
    """Of the very fields the pilot kept, in single precision: energy to its rounding."""
    changes = {**SMALL, **KERR, "ensemble.precision": "single", "line.*.loss_db_per_km": 0.0}
    bench = Bench(with_changes(Experiment(), changes))
    seen = pilot(bench, bench.passage.fields(range(4)), range(4)).seen
    sections = bench.passage.track(seen.trip.field.shape[2]).sections
    found = drifts(sections, seen.launched, seen.trip.field, 4096.0)
    assert 0.0 < found.energy < 1e-4
    assert 0.0 < found.hamiltonian < 0.1


def test_a_span_of_another_kind_is_held_to_its_own_scale() -> None:
    """The first span with a Kerr effect counts, at the power that reaches it."""
    line = [
        Span(length_km=10.0, beta2_ps2_per_km=5.0, loss_db_per_km=0.3, joint_loss_db=1.0),
        Span(length_km=1.0, beta2_ps2_per_km=20.0, gamma_per_w_km=10.0),
    ]
    experiment = Experiment.model_validate(
        {"line": [span.model_dump() for span in line], "launch": {"total_power_mw": 100.0}}
    )
    known = scales(experiment)
    power_w = 0.1 * 10.0**-0.4
    assert known.nonlinear_length_km == pytest.approx(1.0 / (10.0 * 8 / 9 * power_w))
    assert known.healing_time_ps == pytest.approx(np.sqrt(20.0 * known.nonlinear_length_km))
    assert known.nonlinear_phase_rad == pytest.approx(10.0 * 8 / 9 * power_w)
