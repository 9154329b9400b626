"""How colours look: OKLab, and what dichromatic eyes make of them."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

# Ottosson 2020: linear sRGB to cone-like responses, and their cube roots to L, a, b.
_TO_CONES = np.array(
    [
        [0.4122214708, 0.5363325363, 0.0514459929],
        [0.2119034982, 0.6806995451, 0.1073969566],
        [0.0883024619, 0.2817188376, 0.6299787005],
    ]
)
_TO_LAB = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)

# Machado, Oliveira and Fernandes, IEEE Trans. Vis. Comput. Graph. 15 (2009), severity 1.
EYES = {
    "normal": np.eye(3),
    "protan": np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    "deutan": np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.011820, 0.042940, 0.968881],
        ]
    ),
    "tritan": np.array(
        [
            [1.255528, -0.076749, -0.178779],
            [-0.078411, 0.930809, 0.147602],
            [0.004733, 0.691367, 0.303900],
        ]
    ),
}


def oklab(colours: ArrayLike, eye: str = "normal") -> NDArray[np.float64]:
    """OKLab coordinates, shape (n, 3), of sRGB colours in bytes, as an eye sees them."""
    coded = np.asarray(colours, dtype=np.float64) / 255.0
    linear = np.where(coded <= 0.04045, coded / 12.92, ((coded + 0.055) / 1.055) ** 2.4)
    seen = np.clip(linear @ EYES[eye].T, 0.0, None)
    lab: NDArray[np.float64] = np.cbrt(seen @ _TO_CONES.T) @ _TO_LAB.T
    return lab


def least_distance(colours: ArrayLike, eye: str) -> float:
    """Smallest OKLab distance between any two of the colours."""
    lab = oklab(colours, eye)
    gaps = np.linalg.norm(lab[:, None] - lab[None, :], axis=2)
    return float(gaps[np.triu_indices(len(lab), 1)].min())
