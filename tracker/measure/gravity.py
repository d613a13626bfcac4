"""Local gravity of a run, from the sheet or from where the bench stands."""

from tracker.analysis.gravity import normal_gravity
from tracker.sheet import SheetFile

__all__ = ["local_gravity"]

STANDARD_GRAVITY = 9.80665  # 3rd CGPM (1901)
U_ANYWHERE = 0.015  # gravity on the ground runs from 9.78 to 9.83 m/s2: half-range over the square root of three


def local_gravity(file: SheetFile) -> tuple[float, float]:
    """Gravity and its standard uncertainty [m/s^2]: the sheet's value, else by latitude and height, else standard gravity.

    Parameters
    ----------
    file : SheetFile

    Returns
    -------
    (float, float)
    """
    site = file.sheet.site
    if site.gravity_mps2 is not None:
        return site.gravity_mps2, file.u("site.gravity_mps2")
    if site.latitude_deg is not None:
        height = (
            site.height_m
            if site.height_m is not None
            else file.note_default("site.height_m", 0.0, "m", "height above the sea not given")
        )
        return float(normal_gravity(site.latitude_deg, height)), file.u("site.latitude_deg")
    why = "neither site.gravity_mps2 nor site.latitude_deg is given: standard gravity, which may be 0.3 % off"
    return file.note_default("site.gravity_mps2", STANDARD_GRAVITY, "m/s2", why), U_ANYWHERE
