"""Every compiled kernel against its plain oracle of the same name."""

import numpy as np
import pytest

from solver.kernels import (
    band_energy,
    column_powers,
    intensity_moments,
    kerr_rotation,
    linear_flow,
)
from tests import reference

PRECISIONS = [(np.complex64, np.float32), (np.complex128, np.float64)]


def _fields(dtype: type, seed: int = 3, shape: tuple[int, int, int] = (3, 2, 257)) -> np.ndarray:
    stream = np.random.default_rng(seed)
    return (stream.standard_normal(shape) + 1j * stream.standard_normal(shape)).astype(dtype)


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("scale", [1e-3, 1.0, 30.0, 1e3])
def test_kerr_rotation_turns_by_the_stated_phase(dtype: type, real: type, scale: float) -> None:
    """Phases up to some thousand turns: the error is that of the phase's own last digits."""
    field = _fields(dtype)
    expected = reference.kerr_rotation(field, float(real(scale)), float(real(0.7 * scale)))
    turned = field.copy()
    kerr_rotation(real)(turned, real(scale), real(0.7 * scale))
    assert turned.dtype == dtype
    size = np.abs(field.astype(np.complex128))
    phase = scale * (size**2 + 0.7 * size[:, ::-1] ** 2)
    allowed = np.finfo(real).eps * (8.0 + 3.0 * phase) * size
    assert np.all(np.abs(turned - expected) <= allowed)


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_kerr_rotation_at_every_angle_and_both_signs(dtype: type, real: type) -> None:
    """A fine comb of angles through ±3 turns, where the range reduction changes branch."""
    angle = np.linspace(-6.0 * np.pi, 6.0 * np.pi, 20_001)
    for sign in (1.0, -1.0):
        field = np.zeros((1, 2, angle.size), dtype=dtype)
        field[0, 0] = np.sqrt(np.abs(angle))
        before = np.abs(field[0, 0].astype(np.complex128))
        expected = before * np.exp(1j * sign * before**2)
        kerr_rotation(real)(field, real(sign), real(0.0))
        allowed = np.finfo(real).eps * (8.0 + 3.0 * before**2) * before
        assert np.all(np.abs(field[0, 0] - expected) <= allowed)
        assert not field[0, 1].any()


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_kerr_rotation_keeps_powers_for_thousands_of_turns(dtype: type, real: type) -> None:
    """Rounding may walk at random; it must not drift."""
    field = _fields(dtype, shape=(1, 2, 512))
    energy = np.sum(np.abs(field) ** 2, dtype=np.float64)
    rotate = kerr_rotation(real)
    turns = 2000
    for _ in range(turns):
        rotate(field, real(0.37), real(0.11))
    change = np.sum(np.abs(field) ** 2, dtype=np.float64) / energy - 1.0
    assert abs(change) < 0.2 * turns * np.finfo(real).eps


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_kerr_rotation_lets_trouble_be_seen(dtype: type, real: type) -> None:
    """NaN and infinity come out as something that is not finite."""
    for bad in (np.nan, np.inf):
        field = np.ones((1, 2, 4), dtype=dtype)
        field[0, 0, 1] = bad
        kerr_rotation(real)(field, real(1.0), real(1.0))
        assert not np.isfinite(field[0, :, 1]).any()
        assert np.isfinite(field[0, :, 2]).all()


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_linear_flow(dtype: type, real: type) -> None:
    """A complex product, to the last digits."""
    spectrum, operator = _fields(dtype), _fields(dtype, seed=4)[0]
    expected = reference.linear_flow(spectrum, operator)
    linear_flow(spectrum, operator)
    size = np.abs(expected).max()
    assert np.abs(spectrum - expected).max() <= 4.0 * np.finfo(real).eps * size


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize(("first", "last"), [(0, 257), (100, 130), (5, 6)])
def test_band_energy(dtype: type, real: type, first: int, last: int) -> None:
    """Sums over the whole, a band and a single bin."""
    spectrum = _fields(dtype)
    expected = reference.band_energy(spectrum, first, last)
    found = band_energy(spectrum, first, last)
    assert found.dtype == np.float64
    np.testing.assert_allclose(found, expected, rtol=300 * np.finfo(real).eps)


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_intensity_moments(dtype: type, real: type) -> None:
    """Accumulated in double precision whatever the field's."""
    field = _fields(dtype)
    found = intensity_moments(field)
    assert found.dtype == np.float64
    np.testing.assert_allclose(found, reference.intensity_moments(field), rtol=1e-13)


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("columns", [1, 16, 256])
def test_column_powers(dtype: type, real: type, columns: int) -> None:
    """Accumulated in double precision whatever the field's."""
    field = _fields(dtype, shape=(1, 2, 256))[0]
    found = column_powers(field, columns)
    np.testing.assert_allclose(found, reference.column_powers(field, columns), rtol=1e-13)
