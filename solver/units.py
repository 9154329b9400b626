"""Lab units, converted once at the edge.

Inside the solver: power in W, time in ps, distance in km, angular frequency in rad/ps.
"""

import math

LIGHT_SPEED_NM_PER_PS = 299_792.458
"""Speed of light in vacuum, nm/ps (exact, SI)."""


def watt_from_dbm(power_dbm: float) -> float:
    """Power in W from a level in dBm (0 dBm is 1 mW)."""
    return 1e-3 * float(10.0 ** (power_dbm / 10.0))


def dbm_from_watt(power_w: float) -> float:
    """Level in dBm from a power in W; minus infinity for a power of zero."""
    return 10.0 * math.log10(power_w * 1e3) if power_w > 0.0 else -math.inf


def ratio_from_db(level_db: float) -> float:
    """Power ratio from a level in dB."""
    return float(10.0 ** (level_db / 10.0))


def attenuation_per_km(loss_db_per_km: float) -> float:
    """Power attenuation coefficient α in 1/km from a loss in dB/km."""
    return loss_db_per_km * math.log(10.0) / 10.0


def beta2_from_dispersion(dispersion_ps_per_nm_km: float, wavelength_nm: float) -> float:
    """Group-velocity dispersion β2 in ps²/km from D in ps/(nm·km).

    β2 = −D λ²/(2πc); 17 ps/(nm·km) at 1550 nm is −21.7 ps²/km.
    """
    return -dispersion_ps_per_nm_km * wavelength_nm**2 / (2.0 * math.pi * LIGHT_SPEED_NM_PER_PS)


def effective_length_km(length_km: float, loss_db_per_km: float) -> float:
    """Effective length (1 − e^{−αL})/α in km, the length over which the Kerr phase accrues."""
    alpha = attenuation_per_km(loss_db_per_km)
    return -math.expm1(-alpha * length_km) / alpha if alpha else length_km


def beta3_from_slope(
    dispersion_ps_per_nm_km: float, slope_ps_per_nm2_km: float, wavelength_nm: float
) -> float:
    """Third-order dispersion β3 in ps³/km from D and its slope S = dD/dλ in ps/(nm²·km).

    β3 = dβ2/dω = λ³/(2πc)² · (λS + 2D), as follows from D = −2πc β2/λ².
    """
    scale = wavelength_nm**3 / (2.0 * math.pi * LIGHT_SPEED_NM_PER_PS) ** 2
    return scale * (wavelength_nm * slope_ps_per_nm2_km + 2.0 * dispersion_ps_per_nm_km)


def slope_from_beta3(
    dispersion_ps_per_nm_km: float, beta3_ps3_per_km: float, wavelength_nm: float
) -> float:
    """Dispersion slope in ps/(nm²·km) from D and β3; undoes :func:`beta3_from_slope`."""
    scale = wavelength_nm**3 / (2.0 * math.pi * LIGHT_SPEED_NM_PER_PS) ** 2
    return (beta3_ps3_per_km / scale - 2.0 * dispersion_ps_per_nm_km) / wavelength_nm
