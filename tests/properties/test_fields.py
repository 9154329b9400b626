"""What holds for any fibre and any light."""

import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from solver.experiment import Span
from solver.fibre import linear_response, sections
from solver.grid import Grid
from solver.propagation import propagate
from solver.units import (
    attenuation_per_km,
    beta2_from_dispersion,
    dbm_from_watt,
    effective_length_km,
    ratio_from_db,
    watt_from_dbm,
)
from tests import reference

few = settings(max_examples=15, deadline=None, derandomize=True, database=None)
many = settings(max_examples=50, deadline=None, derandomize=True, database=None)


@st.composite
def spans(draw: st.DrawFn, lossless: bool = False) -> Span:
    """A fibre of any kind, weak enough to be resolved on 256 samples."""
    coupling = draw(
        st.sampled_from(["manakov", "linear_birefringent", "isotropic_circular", "uncoupled"])
    )
    return Span(
        length_km=draw(st.floats(0.1, 10.0)),
        beta2_ps2_per_km=draw(st.floats(-30.0, 30.0)),
        beta3_ps3_per_km=draw(st.floats(-2.0, 2.0)),
        loss_db_per_km=0.0 if lossless else draw(st.floats(0.0, 1.0)),
        gamma_per_w_km=draw(st.floats(0.0, 3.0)),
        coupling=coupling,
        delay_ps_per_km=draw(st.floats(-5.0, 5.0)),
        pmd_ps_per_sqrt_km=draw(st.floats(0.0, 0.5)) if coupling == "manakov" else 0.0,
    )


@few
@given(st.lists(spans(), min_size=1, max_size=3), st.integers(0, 1000))
def test_energy_falls_by_the_loss_alone(line: list[Span], seed: int) -> None:
    """Of both components together; of each where no random section mixes them."""
    field = reference.stirred_light(seed, 1, 256, 2.0, 0.02, 0.01)
    out = propagate(field, time_step_ps=2.0, line=line, tolerance=1e-3, fibre_seed=seed)
    assert out.outcome.kind == "completed"
    left = math.exp(-sum(attenuation_per_km(s.loss_db_per_km) * s.length_km for s in line))
    before, after = (np.sum(np.abs(x) ** 2, axis=2)[0] for x in (field, out.field))
    assert math.isclose(after.sum(), left * before.sum(), rel_tol=1e-10)
    if not any(span.pmd_ps_per_sqrt_km for span in line):
        np.testing.assert_allclose(after, left * before, rtol=1e-10)


@few
@given(st.lists(spans(lossless=True), min_size=1, max_size=3), st.integers(0, 1000))
def test_the_linear_line_is_unitary(line: list[Span], seed: int) -> None:
    """At every frequency."""
    grid = Grid(16, 1.0)
    unit = np.broadcast_to(np.eye(2, dtype=complex)[:, :, None], (2, 2, 16))
    response = linear_response(sections(line, grid, 1550.0, seed), unit)
    product = np.einsum("jdf,kdf->fjk", response, response.conj())
    np.testing.assert_allclose(product, np.broadcast_to(np.eye(2), (16, 2, 2)), atol=1e-11)


@few
@given(spans(lossless=True), st.integers(0, 1000), st.floats(0.1, 0.9))
def test_a_cut_fibre_is_the_same_fibre(span: Span, seed: int, cut: float) -> None:
    """Two pieces end to end equal the whole, to the tolerance."""
    whole = span.model_copy(update={"pmd_ps_per_sqrt_km": 0.0})
    parts = [
        whole.model_copy(update={"length_km": whole.length_km * share})
        for share in (cut, 1.0 - cut)
    ]
    field = reference.stirred_light(seed, 1, 256, 2.0, 0.015, 0.01)
    ends = [
        propagate(field, time_step_ps=2.0, line=line, tolerance=1e-4) for line in ([whole], parts)
    ]
    assert {end.outcome.kind for end in ends} == {"completed"}
    assert reference.relative_l2(ends[0].field, ends[1].field) < 2.5e-4


@many
@given(st.floats(-80.0, 60.0))
def test_power_units_return(level_dbm: float) -> None:
    """dBm to W and back; 3 dB more is twice as much."""
    assert math.isclose(dbm_from_watt(watt_from_dbm(level_dbm)), level_dbm, abs_tol=1e-9)
    doubled = watt_from_dbm(level_dbm + 10.0 * math.log10(2.0))
    assert math.isclose(doubled, 2.0 * watt_from_dbm(level_dbm), rel_tol=1e-12)
    assert math.isclose(ratio_from_db(level_dbm), watt_from_dbm(level_dbm) * 1e3, rel_tol=1e-12)


@many
@given(st.floats(-100.0, 100.0), st.floats(500.0, 2000.0))
def test_dispersion_is_linear_and_of_the_other_sign(dispersion: float, wavelength: float) -> None:
    """β2 = −Dλ²/2πc, exact in D."""
    beta2 = beta2_from_dispersion(dispersion, wavelength)
    assert beta2 * dispersion <= 0.0
    assert beta2_from_dispersion(-dispersion, wavelength) == -beta2
    light_nm_per_ps = 299_792.458
    assert math.isclose(
        -beta2 * 2.0 * math.pi * light_nm_per_ps / wavelength**2, dispersion, abs_tol=1e-9
    )


@many
@given(st.floats(0.001, 1000.0), st.floats(0.0, 5.0))
def test_effective_length(length: float, loss: float) -> None:
    """Never longer than the fibre, nor than 1/α; additive down a line."""
    effective = effective_length_km(length, loss)
    alpha = attenuation_per_km(loss)
    assert 0.0 < effective <= length * (1 + 1e-12)
    assert effective * alpha <= 1.0 + 1e-12
    half = effective_length_km(length / 2, loss)
    assert math.isclose(half * (1.0 + math.exp(-alpha * length / 2)), effective, rel_tol=1e-9)
