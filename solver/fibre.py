"""From spans of fibre to linear operators and Kerr coefficients.

For component j of 2 (k the other), with the upper sign for component 1,

    ∂A_j/∂z = −(α_j/2) A_j ∓ (δ/2) ∂A_j/∂t − i(β2_j/2) ∂²A_j/∂t² + (β3/6) ∂³A_j/∂t³
              + i(β4/24) ∂⁴A_j/∂t⁴ + iγ (c_self |A_j|² + c_cross |A_k|²) A_j

(Agrawal, Nonlinear Fiber Optics, coupled-mode equations of a birefringent fibre; Manakov's
form after averaging over random birefringence). With δ > 0 component 1 falls *behind*
component 2: ∂A/∂z = −(δ/2) ∂A/∂t delays A by δz/2.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from solver.experiment import Experiment, Span
from solver.grid import Complex, Grid
from solver.units import attenuation_per_km, ratio_from_db

PMD_SECTIONS = 32
"""Random sections that make up one span with polarization-mode dispersion."""


@dataclass(frozen=True)
class Section:
    """A piece of line with constant coefficients.

    rate: linear operator in the Fourier domain, 1/km, shape (2, samples), FFT order.
    kerr_self, kerr_cross: γ times the coupling's factors, 1/(W·km).
    axes: unitary (2, 2) that turns the components onto the section's own axes and is undone
    at its end; None where they coincide. joint: amplitude transmission at the end.
    """

    length_km: float
    rate: Complex
    kerr_self: float
    kerr_cross: float
    attenuation_per_km: float
    axes: Complex | None = None
    joint: float = 1.0


def _linear_rate(span: Span, grid: Grid, wavelength_nm: float) -> Complex:
    omega = grid.omega
    beta2 = span.beta2(wavelength_nm)
    turn = np.radians(span.retardance_deg) / span.length_km
    rate = np.empty((2, grid.samples), dtype=np.complex128)
    for row, sign in zip(rate, (0.5, -0.5), strict=True):
        loss = attenuation_per_km(span.loss_difference_db_per_km) * sign
        row.real = 0.5 * (loss - _net_attenuation(span))
        coefficients = (
            span.beta4_ps4_per_km / 24.0,
            -span.beta3_ps3_per_km / 6.0,
            0.5 * (beta2 + sign * span.delay_slope_ps2_per_km),
            -sign * span.delay_ps_per_km,
            sign * turn,
        )
        row.imag = np.polyval(np.trim_zeros(coefficients, "f") or [0.0], omega)
    return rate


def _net_attenuation(span: Span) -> float:
    return attenuation_per_km(span.loss_db_per_km - span.gain_db_per_km)


def _random_axes(fibre_seed: int, span: int, fibre: int | None) -> Complex:
    """Axes of the sections of a span, unitary and uniform on SU(2): unit quaternions as matrices.

    Shape (PMD_SECTIONS, 2, 2). fibre: None for the one frozen fibre of a seed, or the number of
    the realization that has a fibre of its own.
    """
    key = (span,) if fibre is None else (span, fibre)
    stream = np.random.default_rng(np.random.SeedSequence(fibre_seed, spawn_key=key))
    q = stream.standard_normal((PMD_SECTIONS, 4))
    w, x, y, z = (q / np.linalg.norm(q, axis=1, keepdims=True)).T
    axes = np.array([[w + 1j * x, y + 1j * z], [-y + 1j * z, w - 1j * x]])
    return np.moveaxis(axes, 2, 0)


def _own_axes(span: Span) -> Complex | None:
    """Axes of a span without random sections."""
    c, s = np.cos(turn := np.radians(span.axes_deg)), np.sin(turn)
    return np.array([[c, s], [-s, c]], dtype=np.complex128) if turn else None


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
        alpha = _net_attenuation(span)
        joint = float(np.sqrt(ratio_from_db(-span.joint_loss_db)))
        if not span.pmd_ps_per_sqrt_km:
            axes = _own_axes(span)
            made.append(Section(span.length_km, rate, kerr_self, kerr_cross, alpha, axes, joint))
            continue
        length = span.length_km / PMD_SECTIONS
        mean_ps = span.pmd_ps_per_sqrt_km * np.sqrt(span.length_km)
        delay_ps = mean_ps / np.sqrt(8.0 * PMD_SECTIONS / (3.0 * np.pi))
        skew = 0.5j * grid.omega * delay_ps / length
        turned = rate + np.stack([-skew, skew])
        made.extend(
            Section(length, turned, kerr_self, kerr_cross, alpha, axes)
            for axes in _random_axes(fibre_seed, index, None)
        )
        made[-1] = replace(made[-1], joint=joint)
    return made


def drawn_axes(line: Sequence[Span], fibre_seed: int, fibres: range) -> list[Complex | None]:
    """Axes of each of the :func:`sections` where every realization has a fibre of its own.

    Fibres differ in their random axes only: those are of shape (fibres, 2, 2), any others of
    shape (2, 2) or None as before.
    """
    axes: list[Complex | None] = []
    for index, span in enumerate(line):
        if span.pmd_ps_per_sqrt_km:
            axes.extend(
                np.stack([_random_axes(fibre_seed, index, fibre) for fibre in fibres], axis=1)
            )
        else:
            axes.append(_own_axes(span))
    return axes


def fibres_are_drawn(experiment: Experiment) -> bool:
    """Whether each realization travels a fibre of its own."""
    return experiment.ensemble.fibres == "drawn" and any(
        span.pmd_ps_per_sqrt_km for span in experiment.line
    )


def linear_response(
    made: Sequence[Section], response: Complex, axes: Sequence[Complex | None] | None = None
) -> Complex:
    """Carry a response of shape (…, 2, draws, samples) through the line with the Kerr term off.

    axes: those of :func:`drawn_axes` instead of the sections' own; the response then is of shape
    (fibres, 2, draws, samples), or (1, 2, draws, samples) where all fibres are sent the same.
    """
    flow = np.ones(0)
    last: Section | None = None
    for index, section in enumerate(made):
        if last is None or last.rate is not section.rate or last.length_km != section.length_km:
            flow = np.exp(section.rate * section.length_km)[:, None, :]
        last = section
        turn = section.axes if axes is None else axes[index]
        if turn is None:
            response = flow * response
        else:
            response = _turned(turn.conj().swapaxes(-1, -2), flow * _turned(turn, response))
        if section.joint != 1.0:
            response = section.joint * response
    return response


def _turned(axes: Complex, response: Complex) -> Complex:
    """One matrix, or one for each fibre, on responses of shape (…, 2, draws, samples)."""
    shape = response.shape
    turned = axes @ response.reshape(*shape[:-2], -1)
    return np.asarray(turned.reshape(*turned.shape[:-1], *shape[-2:]))
