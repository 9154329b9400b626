"""Splitting schemes as data.

A step of length h applies, in turn, the Kerr flow over kerr[0]·h, the linear flow over
linear[0]·h, the Kerr flow over kerr[1]·h, …, ending with Kerr. Because the Kerr flow leaves
the powers |A|² alone and meets the next step's first stage, it costs one application per
linear stage, and the powers at the end of a step are known without another transform.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Scheme:
    """A symmetric splitting: fractions of the step for each flow, each summing to 1."""

    name: str
    order: int
    kerr: tuple[float, ...]
    linear: tuple[float, ...]

    @property
    def transforms_per_step(self) -> int:
        """Fourier transforms of the batch in one step."""
        return 2 * len(self.linear)


SECOND_ORDER = Scheme("second-order symmetric", 2, kerr=(0.5, 0.5), linear=(1.0,))
"""Strang, SIAM J. Numer. Anal. 5, 506 (1968)."""


def _fourth_order() -> Scheme:
    a1, a2, a3 = 0.0792036964311957, 0.353172906049774, -0.0420650803577195
    b1, b2 = 0.209515106613362, -0.143851773179818
    a4, b3 = 1.0 - 2.0 * (a1 + a2 + a3), 0.5 - (b1 + b2)
    return Scheme(
        "fourth-order symmetric, six stages",
        4,
        kerr=(a1, a2, a3, a4, a3, a2, a1),
        linear=(b1, b2, b3, b3, b2, b1),
    )


FOURTH_ORDER = _fourth_order()
"""Blanes and Moan, J. Comput. Appl. Math. 142, 313 (2002), table 2, S6 of order 4."""
