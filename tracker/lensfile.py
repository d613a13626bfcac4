"""A lens as a TOML file, so that a calibration made once serves every run of that camera and mode."""

from pathlib import Path

import numpy as np

from calibration.lens import Lens
from calibration.notice import BadInput
from tracker.sheet import read_toml

__all__ = ["FORMAT", "lens_text", "read_lens"]

FORMAT = 1
NAMES = ("fx", "fy", "cx", "cy", "k1", "k2", "p1", "p2", "k3")


def lens_text(lens: Lens, camera: str = "", residual_px: float = float("nan"), views: int = 0) -> str:
    """The text of a lens file.

    Parameters
    ----------
    lens : Lens
    camera : str
        What camera and mode it belongs to.
    residual_px : float
        RMS of one coordinate of a corner [px].
    views : int
        How many views it rests on.

    Returns
    -------
    str
        TOML, UTF-8; `read_lens` reads it back to the last digit.
    """
    rows = ",\n    ".join("[" + ", ".join(repr(float(v)) for v in row) + "]" for row in np.asarray(lens.cov))
    values = "\n".join(f"{name} = {float(value)!r}" for name, value in zip(NAMES, lens.values, strict=True))
    quoted = camera.replace("\\", "\\\\").replace('"', '\\"')
    return (
        f"# Lens of a camera in one mode: Brown-Conrady, pixels of the upright picture, centre of the top-left pixel (0, 0).\n"
        f'format = {FORMAT}\ncamera = "{quoted}"\nsize = [{lens.size[0]}, {lens.size[1]}]\n'
        f"views = {views}\nresidual_px = {float(residual_px)!r}\n\n[lens]\n{values}\n"
        f"# covariance of {', '.join(NAMES)}\ncovariance = [\n    {rows},\n]\n"
    )


def read_lens(path: Path) -> Lens:
    """Read a lens file.

    Raises
    ------
    BadInput
        No such file, not a lens file, or numbers that no lens has.
    """
    tables = read_toml(path)
    if tables.get("format") != FORMAT:
        raise BadInput(f"{path.name}: format is {tables.get('format')!r}, not {FORMAT}.", "Make it again with linefall lens.")
    try:
        lens = tables["lens"]
        values = [float(lens[name]) for name in NAMES]
        size = (int(tables["size"][0]), int(tables["size"][1]))
        covariance = np.array(lens["covariance"], dtype=float)
        return Lens(values[0], values[1], values[2], values[3], np.array(values[4:]), covariance, size)
    except (KeyError, TypeError, ValueError, IndexError) as error:
        raise BadInput(f"{path.name} is not a whole lens file ({error}).", "Make it again with linefall lens.") from None
    except BadInput as fault:
        raise BadInput(f"{path.name}: {fault.says}", fault.remedy) from None
