"""Closed forms of thermal light that need no more of its spectrum than widths.

Densities are means over the bins of a histogram, so that they may be held against one.
"""

import numpy as np

from solver.grid import Real

EQUAL = 1e-3
"""Difference of two shares of the power below which they are taken to be equal."""


def _binned(cumulative: Real, edges: Real) -> Real:
    return np.asarray(np.diff(cumulative) / np.diff(edges))


def intensity_density(edges: Real) -> Real:
    """Density of I/⟨I⟩ of one component: e^{−x} (Goodman, Statistical Optics, ch. 4)."""
    return _binned(-np.exp(-edges), edges)


def sum_density(edges: Real, share_1: float) -> Real:
    """Density of (I1 + I2)/⟨I1 + I2⟩ of two independent components.

    share_1: share of component 1 in the mean. For equal shares the Gamma density 4x e^{−2x};
    otherwise the difference of two exponentials (Goodman, ch. 4, partially polarized light).
    """
    p, q = share_1, 1.0 - share_1
    if abs(p - q) < EQUAL:
        return _binned(-np.exp(-2.0 * edges) * (1.0 + 2.0 * edges), edges)
    parts = [s * np.exp(-edges / s) if s > 0.0 else 0.0 * edges for s in (p, q)]
    return _binned((parts[1] - parts[0]) / (p - q), edges)


def quadrature_density(edges: Real) -> Real:
    """Standard normal density."""
    # By Simpson's rule, whose error at these widths is below 1e-6.
    low, high = edges[:-1], edges[1:]
    points = np.stack([low, (low + high) / 2.0, high])
    values = np.exp(-(points**2) / 2.0) / np.sqrt(2.0 * np.pi)
    return np.asarray((values[0] + 4.0 * values[1] + values[2]) / 6.0)


def walls_per_ps(mean_w: Real, rms_rad_per_ps: Real) -> float:
    """Rate at which two independent components are equally bright, 1/ps.

    mean_w, rms_rad_per_ps: means and rms angular widths of the two spectra, shape (2,). Own
    derivation after Rice (Bell Syst. Tech. J. 24, 46, 1945): N = ∫ p1(I) p2(I) ⟨|dI1/dt − dI2/dt|⟩
    dI, where dI_j/dt is Gaussian of variance 2 I m_j w_j² at given I, so
    N = √(m1 m2 (m1 w1² + m2 w2²))/(m1 + m2)^{3/2}; w/2 for equal components. For spectra that
    are symmetric about their means, and without smoothing.
    """
    m1, m2 = mean_w
    slopes = float(np.sum(mean_w * rms_rad_per_ps**2))
    total = float(m1 + m2)
    return float(np.sqrt(m1 * m2 * slopes) / total**1.5) if total > 0.0 else 0.0


def wall_width_ps(rms_rad_per_ps: float) -> float:
    """Mean of 2/|dC/dt| where the contrast of two independent equal components crosses zero.

    2/⟨|dC/dt|⟩ with C uniform, so that the rate above is ⟨|dC/dt|⟩/2: 2/w.
    """
    return 2.0 / rms_rad_per_ps
