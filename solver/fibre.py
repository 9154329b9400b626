"""From spans of fibre to linear operators and Kerr coefficients.

For component j of 2 (k the other), with the upper sign for component 1,

    ∂A_j/∂z = −(α/2) A_j ∓ (δ/2) ∂A_j/∂t − i(β2/2) ∂²A_j/∂t² + (β3/6) ∂³A_j/∂t³
              + iγ (c_self |A_j|² + c_cross |A_k|²) A_j

(Agrawal, Nonlinear Fiber Optics, coupled-mode equations of a birefringent fibre; Manakov's
form after averaging over random birefringence). With δ > 0 component 1 falls *behind*
component 2: ∂A/∂z = −(δ/2) ∂A/∂t delays A by δz/2.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from solver.experiment import Span
from solver.grid import Complex, Grid
from solver.units import attenuation_per_km

PMD_SECTIONS = 32
"""Random sections that make up one span with polarization-mode dispersion."""


@dataclass(frozen=True)
class Section:
    """A piece of line with constant coefficients.

    rate: linear operator in the Fourier domain, 1/km, shape (2, samples), FFT order.
    kerr_self, kerr_cross: γ times the coupling's factors, 1/(W·km).
    axes: unitary (2, 2) that turns the components onto the section's own axes and is undone
    at its end; None where they coincide.
    """

    length_km: float
    rate: Complex
    kerr_self: float
    kerr_cross: float
    attenuation_per_km: float
    axes: Complex | None = None


def _linear_rate(span: Span, grid: Grid, wavelength_nm: float) -> Complex:
    omega = grid.omega
    beta2 = span.beta2(wavelength_nm)
    common = (
        -attenuation_per_km(span.loss_db_per_km) / 2
        + 0.5j * beta2 * omega**2
        - 1j / 6.0 * span.beta3_ps3_per_km * omega**3
    )
    skew = 0.5j * span.delay_ps_per_km * omega
    return np.stack([common - skew, common + skew])


def _random_axes(stream: np.random.Generator) -> Complex:
    """A unitary with determinant 1, uniform on SU(2): a unit quaternion in matrix form."""
    w, x, y, z = (q := stream.standard_normal(4)) / np.linalg.norm(q)
    return np.array([[w + 1j * x, y + 1j * z], [-y + 1j * z, w - 1j * x]])


def sections(
    line: Sequence[Span], grid: Grid, wavelength_nm: float, fibre_seed: int = 0
) -> list[Section]:
    """The line as sections of constant coefficients.

    A span with polarization-mode dispersion becomes random sections: turned axes, then a
    differential delay τ, chosen so that the mean differential group delay of the
    concatenation, τ √(8N/3π) for N sections (Foschini and Poole, J. Lightwave Technol. 9,
    1439, 1991: Maxwellian limit of a random walk), is PMD coefficient × √length.
    """
    made: list[Section] = []
    for index, span in enumerate(line):
        rate = _linear_rate(span, grid, wavelength_nm)
        factors = span.kerr_coefficients()
        kerr_self, kerr_cross = (span.gamma_per_w_km * factor for factor in factors)
        alpha = attenuation_per_km(span.loss_db_per_km)
        if not span.pmd_ps_per_sqrt_km:
            made.append(Section(span.length_km, rate, kerr_self, kerr_cross, alpha))
            continue
        stream = np.random.default_rng(np.random.SeedSequence(fibre_seed, spawn_key=(index,)))
        length = span.length_km / PMD_SECTIONS
        mean_ps = span.pmd_ps_per_sqrt_km * np.sqrt(span.length_km)
        delay_ps = mean_ps / np.sqrt(8.0 * PMD_SECTIONS / (3.0 * np.pi))
        skew = 0.5j * grid.omega * delay_ps / length
        turned = rate + np.stack([-skew, skew])
        made.extend(
            Section(length, turned, kerr_self, kerr_cross, alpha, _random_axes(stream))
            for _ in range(PMD_SECTIONS)
        )
    return made


def linear_response(made: Sequence[Section], response: Complex) -> Complex:
    """Carry a response of shape (2, 2 draws, samples) through the line with the Kerr term off."""
    for section in made:
        flow = np.exp(section.rate * section.length_km)[:, None, :]
        if section.axes is None:
            response = flow * response
        else:
            turned = np.einsum("jk,kdf->jdf", section.axes, response)
            response = np.einsum("kj,kdf->jdf", section.axes.conj(), flow * turned)
    return response
