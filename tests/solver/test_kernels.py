"""Every compiled kernel against its plain oracle of the same name."""

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from solver.kernels import (
    band_share,
    column_powers,
    column_stokes,
    domain_counts,
    field_walls,
    intensity_counts,
    intensity_moments,
    kerr_rotation,
    linear_flow,
    local_polarization,
    map_levels,
    quadrature_counts,
    spectral_lines,
    sphere_counts,
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
def test_equal_phases_turn_both_components_alike(dtype: type, real: type) -> None:
    """The short way that Manakov coupling takes gives what unequal phases tend to."""
    field = _fields(dtype)
    alike, nearly = field.copy(), field.copy()
    phase = real(0.9)
    kerr_rotation(real)(alike, phase, phase)
    kerr_rotation(real)(nearly, phase, np.nextafter(phase, real(1.0)))
    expected = reference.kerr_rotation(field, float(phase), float(phase))
    allowed = 40.0 * np.finfo(real).eps * np.abs(field.astype(np.complex128)).max()
    assert np.abs(alike - expected).max() <= allowed
    assert np.abs(alike - nearly).max() <= allowed


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize(("first", "last"), [(0, 257), (100, 130), (5, 6), (0, 0), (250, 257)])
def test_band_share(dtype: type, real: type, first: int, last: int) -> None:
    """The whole, a band, a single bin, none: the largest of the realizations' shares."""
    spectrum = _fields(dtype)
    spectrum[1, :, 100:130] *= 3.0
    expected = reference.band_share(spectrum, first, last)
    found = band_share(spectrum, first, last)
    assert found == pytest.approx(expected, rel=float(300 * np.finfo(real).eps))


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_band_share_lets_trouble_be_seen(dtype: type, real: type) -> None:
    """NaN, infinity and overflow, inside the band and outside, in any realization; dark is 0."""
    for bad in (np.nan, np.inf, 2.0 * np.sqrt(np.finfo(real).max)):
        for realization, component, place in ((0, 0, 10), (2, 1, 100), (1, 0, 256)):
            spectrum = _fields(dtype)
            spectrum[realization, component, place] = bad
            with np.errstate(over="ignore", invalid="ignore"):
                assert np.isnan(band_share(spectrum, 90, 120))
    dark = np.zeros((2, 2, 257), dtype=dtype)
    assert band_share(dark, 90, 120) == reference.band_share(dark, 90, 120) == 0.0
    dark[1, 0, 100] = 1.0
    assert band_share(dark, 90, 120) == 1.0


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


@pytest.mark.parametrize("real", [np.float32, np.float64])
@pytest.mark.parametrize("samples", [256, 257])
@pytest.mark.parametrize("width", [1, 2, 5, 16, 255])
def test_domain_counts(real: type, samples: int, width: int) -> None:
    """Every wall and every duration of speckle, smoothed or not, counted as numpy counts them."""
    power = np.abs(_fields(np.complex128, 9, (5, 2, samples))) ** 2
    power = np.asarray(0.02 * power, dtype=real)
    found = np.empty((5, samples)), np.zeros((5, 50)), np.zeros((5, 42))
    expected = np.empty((5, samples)), np.zeros((5, 50)), np.zeros((5, 42))
    domain_counts(power, width, 30.3, *found)
    reference.domain_counts(power, width, 30.3, *expected)
    np.testing.assert_allclose(found[0], expected[0], atol=1e-11)
    np.testing.assert_array_equal(found[1], expected[1])
    np.testing.assert_array_equal(np.delete(found[2], 1, 1), np.delete(expected[2], 1, 1))
    np.testing.assert_allclose(found[2][:, 1], expected[2][:, 1], rtol=1e-8)
    assert (found[1].sum(axis=1) == samples).all()


def test_domain_counts_of_one_wall_none_and_the_dark() -> None:
    """A window all of one domain has no walls; two walls make two durations, one around the end;
    a duration that is longer than the histogram counts as a wall only."""
    power = np.ones((4, 2, 64))
    power[0, 1] = 0.1
    power[1, 0, 10:20] = 0.1
    power[1, 1, 20:] = power[1, 1, :10] = 0.1
    power[2] = 0.0
    power[3, 0, :] = 0.0
    for longest in (64.0, 16.0):
        found = np.empty((4, 64)), np.zeros((4, 50)), np.zeros((4, 10))
        expected = np.empty((4, 64)), np.zeros((4, 50)), np.zeros((4, 10))
        domain_counts(power, 1, longest, *found)
        reference.domain_counts(power, 1, longest, *expected)
        np.testing.assert_allclose(found[2], expected[2], rtol=1e-14)
        np.testing.assert_array_equal(found[1], expected[1])
        assert list(found[2][:, 0]) == [0, 2, 0, 0]
        assert found[2][1, 2:].sum() == (2 if longest == 64.0 else 1)
        assert found[1][2, 25] == 64
        assert found[1][3, 0] == 64


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("width", [1, 2, 5, 16])
def test_field_walls(dtype: type, real: type, width: int) -> None:
    """Counted from fields as from intensities."""
    field = _fields(dtype, 9, (5, 2, 257))
    np.testing.assert_array_equal(field_walls(field, width), reference.field_walls(field, width))


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_sphere_counts(dtype: type, real: type) -> None:
    """Every sample in its bin, but for those that rounding moves across a border; the poles, the
    equator's four corners and the dark."""
    field = _fields(dtype, 5, (3, 2, 4000))
    found, expected = np.zeros((3, 24, 48)), np.zeros((3, 24, 48))
    means = sphere_counts(real)(field, found)
    wanted = reference.sphere_counts(field, expected)
    assert means.dtype == np.float64
    np.testing.assert_allclose(means, wanted, atol=20 * np.finfo(real).eps * wanted[:, 0].max())
    assert np.abs(found - expected).sum() <= (6 if real is np.float32 else 0)
    special = np.zeros((1, 2, 8), dtype=dtype)
    special[0, :, 1:] = [[1, 1, 1, 0, 1, 1, 1], [1j, -1j, 0, 1, 1, -1, 0.1j]]
    corners = np.zeros((1, 24, 48))
    sphere_counts(real)(special, corners)
    assert corners.sum() == 7
    assert corners[0, 23].sum() == corners[0, 0].sum() == 1
    assert corners[0, 12, [0, 12, 36, 47, 24]].sum() >= 3


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("width", [1, 4, 256])
def test_local_polarization(dtype: type, real: type, width: int) -> None:
    """One at each single sample, that of the whole window over it, and zero in the dark."""
    field = _fields(dtype, 8, (3, 2, 256))
    found = local_polarization(field, width)
    np.testing.assert_allclose(found, reference.local_polarization(field, width), rtol=1e-6)
    if width == 1:
        np.testing.assert_allclose(found, 1.0, rtol=1e-12)
    assert local_polarization(np.zeros_like(field), width).max() == 0.0


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
def test_intensity_and_quadrature_counts(dtype: type, real: type) -> None:
    """What lies beyond the top or has no mean is left out, and nothing else."""
    field = _fields(dtype, 6, (3, 2, 2000))
    power = (np.abs(field.astype(np.complex128)) ** 2).astype(real)
    power[0, 0, :3] = [-1.0, 0.0, 99.0]
    for mean in ([2.0, 2.0], [0.4, 0.0]):
        found, expected = np.zeros((3, 3, 60)), np.zeros((3, 3, 60))
        intensity_counts(power, np.array(mean), 8.0, found)
        reference.intensity_counts(power, np.array(mean), 8.0, expected)
        assert np.abs(found - expected).sum() <= 4
        rows, wanted = np.zeros((3, 60)), np.zeros((3, 60))
        quadrature_counts(field, np.array(mean), 4.0, rows)
        reference.quadrature_counts(field, np.array(mean), 4.0, wanted)
        assert np.abs(rows - wanted).sum() <= 4
        assert wanted.sum() > 1000


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("samples", [64, 256, 1024])
def test_spectral_lines(dtype: type, real: type, samples: int) -> None:
    """On the axis's own grid, on a coarser and on a finer one."""
    spectrum = _fields(dtype, 7, (2, 2, samples))
    found = np.zeros((2, 2, 64)), np.empty((2, 2, 4))
    expected = np.zeros((2, 2, 64)), np.empty((2, 2, 4))
    spectral_lines(spectrum, 256, *found)
    reference.spectral_lines(spectrum, 256, *expected)
    np.testing.assert_allclose(found[0], expected[0], rtol=1e-12)
    np.testing.assert_allclose(found[1], expected[1], rtol=1e-10, atol=1e-8)


@pytest.mark.parametrize(("dtype", "real"), PRECISIONS)
@pytest.mark.parametrize("columns", [1, 16, 256])
def test_column_stokes(dtype: type, real: type, columns: int) -> None:
    """Accumulated in double precision whatever the field's."""
    field = _fields(dtype, shape=(1, 2, 256))[0]
    found = column_stokes(field, columns)
    np.testing.assert_allclose(found, reference.column_stokes(field, columns), atol=1e-13)


def test_map_levels() -> None:
    """Contrast and powers over their whole range, beyond its top, and in the dark."""
    powers = np.random.default_rng(4).gamma(1.0, 0.05, size=(33, 4, 70))
    powers[0], powers[1, 0], powers[2, 1] = 0.0, 0.0, 0.0
    powers[3, :2, :9] = 40.0
    powers[:, 2:] -= 0.05
    whole = map_levels(powers, 1e-3)
    assert whole.dtype == np.uint8
    np.testing.assert_array_equal(whole, reference.map_levels(powers, 1e-3))
    found = map_levels(powers[:, :2], 1e-3)
    np.testing.assert_array_equal(found, whole[:3])
    assert (found[0, 0] == 128).all()
    assert (found[0, 1] == 0).all()
    assert (found[0, 2] == 255).all()
    assert (found[1:, 3, :9] == 255).all()


def test_processors_without_wide_vectors_get_the_same_numbers(tmp_path: Path) -> None:
    """Compiled for the plainest processor of this kind, every kernel still equals its oracle."""
    kinds = (
        "turns_by or equal or linear_flow or share or moments or powers or counts or levels "
        "or walls or lines or stokes or polarization"
    )
    plain = {
        "NUMBA_CPU_NAME": "generic",
        "NUMBA_CPU_FEATURES": "",
        "NUMBA_CACHE_DIR": str(tmp_path),
    }
    probe = (
        "import sys, pytest\n"
        "from numba.core import config\n"
        "import solver.kernels\n"
        "assert (config.CPU_NAME, config.CPU_FEATURES) == ('generic', '')\n"
        f"chosen = ['-k', {kinds!r}, {__file__!r}]\n"
        "sys.exit(pytest.main(['-q', '-p', 'no:cacheprovider', *chosen]))"
    )
    done = subprocess.run(
        [sys.executable, "-c", probe],
        cwd=Path(__file__).parents[2],
        env=os.environ | plain,
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert done.returncode == 0, done.stdout[-3000:] + done.stderr[-1000:]
    assert done.stdout.count(".") >= 50
