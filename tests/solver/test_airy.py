"""Higher-order dispersion of a Gaussian pulse: Airy's function, and quadrature of the spectrum."""

import mpmath
import numpy as np
import pytest
from scipy.special import airy

from solver.experiment import Span
from solver.propagation import propagate
from tests import reference
from tests.checks import check

TIME_STEP_PS = 0.5
TIME = reference.time_axis(4096, TIME_STEP_PS)
WIDTH_PS = 6.0
LENGTH_KM = 20.0


def _sent(span: Span) -> np.ndarray:
    field = np.exp(-(TIME**2) / (2.0 * WIDTH_PS**2)) * np.ones((1, 2, 1))
    out = propagate(field + 0j, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-8)
    assert out.outcome.kind == "completed"
    return np.asarray(out.field[0])


@pytest.mark.parametrize("beta3", [20.0, -11.0])
@pytest.mark.parametrize("beta2", [0.0, 2.0, -1.5])
def test_third_order_dispersion(beta2: float, beta3: float) -> None:
    """A = T√2π q^{−1/3} Ai[(W⁴/4q − t)q^{−1/3}] exp(W⁶/12q² − W²t/2q).

    q = β3z/2 and W² = T² − iβ2z, by completing the cube in the Fourier integral (Miyagi and
    Nishida, Appl. Opt. 18, 678, 1979; Agrawal, Nonlinear Fiber Optics, ch. 3). For β3 < 0 time
    runs backwards.
    """
    backwards = beta3 < 0.0
    q = abs(beta3) * LENGTH_KM / 2.0
    time = -TIME if backwards else TIME
    w2 = WIDTH_PS**2 - 1j * beta2 * LENGTH_KM
    argument = (w2**2 / (4.0 * q) - time) / np.cbrt(q)
    exact = WIDTH_PS * np.sqrt(2.0 * np.pi) / np.cbrt(q) * airy(argument)[0]
    exact = exact * np.exp(w2**3 / (12.0 * q**2) - w2 * time / (2.0 * q))
    span = Span(length_km=LENGTH_KM, beta2_ps2_per_km=beta2, beta3_ps3_per_km=beta3)
    check(
        "third-order dispersion of a Gaussian pulse: field",
        "Airy function; Miyagi and Nishida, Appl. Opt. 18, 678 (1979)",
        reference.relative_l2(_sent(span)[0], exact),
        1e-9,
    )
    tail = np.abs(exact) ** 2 * (time > 0.0)
    assert tail.sum() > 0.55 * (np.abs(exact) ** 2).sum()


@pytest.mark.parametrize("beta4", [230.0, -150.0])
@pytest.mark.parametrize(("beta2", "beta3", "slope"), [(0.0, 0.0, 0.0), (2.0, 12.0, 1.0)])
def test_fourth_order_dispersion(beta2: float, beta3: float, beta4: float, slope: float) -> None:
    """The Fourier integral of the pulse by mpmath's quadrature, both components, some times.

    e^{+i(β2 ± half the slope)ω²z/2 − iβ3ω³z/6 + iβ4ω⁴z/24}.
    """
    span = Span(
        length_km=LENGTH_KM,
        beta2_ps2_per_km=beta2,
        beta3_ps3_per_km=beta3,
        beta4_ps4_per_km=beta4,
        delay_slope_ps2_per_km=slope,
    )
    found = _sent(span)
    largest = np.abs(found).max()
    for component, sign in enumerate((1.0, -1.0)):
        for index in (2030, 2101):
            time = float(TIME[index])

            def integrand(omega: float, sign: float = sign, time: float = time) -> mpmath.mpc:
                z = LENGTH_KM
                phase = (beta2 + sign * slope / 2) * omega**2 * z / 2
                phase += -beta3 * omega**3 * z / 6 + beta4 * omega**4 * z / 24
                amplitude = WIDTH_PS / mpmath.sqrt(2 * mpmath.pi)
                return amplitude * mpmath.exp(
                    -(WIDTH_PS**2) * omega**2 / 2 + 1j * (phase + omega * time)
                )

            panels = np.linspace(-1.2, 1.2, 33).tolist()
            exact = complex(mpmath.quad(integrand, panels, method="gauss-legendre", maxdegree=4))
            check(
                "fourth-order dispersion of a Gaussian pulse: field at single times, of its peak",
                "Fourier integral by mpmath quadrature",
                abs(found[component, index] - exact) / largest,
                1e-9,
            )
    without = _sent(span.model_copy(update={"beta4_ps4_per_km": 0.0}))
    assert reference.relative_l2(found, without) > 0.1
