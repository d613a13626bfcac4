"""Normal gravity by geodetic latitude and height: WGS 84 (NIMA TR8350.2, chapter 4)."""

import math

__all__ = ["normal_gravity"]

EQUATOR, POLE = 9.7803253359, 9.8321849378  # m/s^2
E2 = 0.00669437999014  # first eccentricity squared
A, B = 6378137.0, 6356752.3142  # semi-axes [m]
K = B * POLE / (A * EQUATOR) - 1  # Somigliana's constant
FLATTENING = 1 / 298.257223563
M = 0.00344978650684  # omega^2 a^2 b / GM


def normal_gravity(latitude_deg: float, height_m: float = 0.0) -> float:
    """Normal gravity on or above the ellipsoid.

    Parameters
    ----------
    latitude_deg : float
        Geodetic latitude [degree].
    height_m : float
        Height above the ellipsoid [m]; up to some ten kilometres.

    Returns
    -------
    float
        [m/s^2]. Real gravity departs from it by up to some 1e-3 m/s^2.

    Raises
    ------
    ValueError
        Latitude outside -90 to 90 degrees.

    Notes
    -----
    Somigliana's closed form and the second-order height term of TR8350.2, equations 4-1 and 4-3.
    """
    if not -90 <= latitude_deg <= 90:
        raise ValueError(f"latitude_deg: expected -90 to 90, got {latitude_deg}.")
    s2 = math.sin(math.radians(latitude_deg)) ** 2
    surface = EQUATOR * (1 + K * s2) / math.sqrt(1 - E2 * s2)
    ratio = height_m / A
    return surface * (1 - 2 * (1 + FLATTENING + M - 2 * FLATTENING * s2) * ratio + 3 * ratio**2)
