"""Python values as strict JSON: no NaN, no infinity, no types of NumPy; and files with their hashes."""

import dataclasses
import datetime as dt
import hashlib
import json
import math
from collections.abc import Mapping
from pathlib import Path, PurePath
from typing import Any

import numpy as np

__all__ = ["as_json", "plain", "sha256_of"]


def plain(value: Any) -> Any:
    """The same in lists, dicts, str, int, float, bool and None; what is not finite becomes None.

    Parameters
    ----------
    value : Any
        Also arrays and scalars of NumPy, data classes, paths, dates.

    Returns
    -------
    Any

    Raises
    ------
    TypeError
        Something that has no plain form.
    """
    if isinstance(value, np.generic):
        value = value.item()
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, Mapping):
        return {str(key): plain(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [plain(inner) for inner in value]
    if isinstance(value, set | frozenset):
        return sorted((plain(inner) for inner in value), key=str)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {item.name: plain(getattr(value, item.name)) for item in dataclasses.fields(value)}
    if isinstance(value, PurePath):
        return value.as_posix()
    if isinstance(value, dt.date | dt.time):
        return value.isoformat()
    if hasattr(value, "numerator") and hasattr(value, "denominator"):  # a Fraction: stamps tick in rationals
        return f"{value.numerator}/{value.denominator}"
    raise TypeError(f"{type(value).__name__} has no plain form for result.json: {value!r}.")


def as_json(value: Any) -> str:
    """Strict JSON (RFC 8259), UTF-8 text, two spaces a level, ending in a newline."""
    return json.dumps(plain(value), ensure_ascii=False, allow_nan=False, indent=2) + "\n"


def sha256_of(path: Path) -> str | None:
    """Hash of a file as lower-case hex, read in pieces; None where it is not there."""
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError:
        return None
