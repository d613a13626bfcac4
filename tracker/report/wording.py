"""Keys and values of a result as words: what the rooms hand over as tables, on a page that people read."""

import math
from collections.abc import Iterator, Mapping
from typing import Any

from tracker.report.names import show_unit

__all__ = ["compact", "flat", "in_words", "value_in_words"]

_UNITS = {
    "fps": "frames/s", "s": "s", "m": "m", "px": "px", "deg": "°", "mps2": "m/s²", "mps": "m/s", "kg": "kg",
    "mm_per_px": "mm/px", "px_per_m": "px/m", "kg_per_m": "kg/m", "hz": "Hz",
}  # fmt: skip
_LABELS = {"fps": "frame rate", "sha256": "SHA-256", "pix_fmt": "pixel format"}
MOST_VALUES = 8


def compact(value: float, digits: int = 3) -> str:
    """A number with so many significant digits, with a power of ten only where zeros would be counted."""
    if not math.isfinite(value):
        return "not known" if math.isnan(value) else "unlimited"
    if value == 0 or 1e-4 <= abs(value) < 1e6:
        text = f"{value:.{digits}g}"
        return (f"{value:.0f}" if "e" in text else text).replace("-", "−")
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    raised = str(int(exponent)).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
    return f"{mantissa} × 10{raised}".replace("-", "−")


def flat(table: Mapping[str, Any], above: str = "") -> Iterator[tuple[str, Any]]:
    """Nested tables as ``table.key`` and value, in their order."""
    for key, value in table.items():
        name = f"{above}.{key}" if above else str(key)
        if isinstance(value, Mapping):
            yield from flat(value, name)
        else:
            yield name, value


def in_words(key: str, value: Any) -> tuple[str, str]:
    """Key and value of a table as label and text with unit: ``u_readout_s``, 0.0004 becomes u(readout), 0.0004 s."""
    parts = key.split(".")
    name, unit = _split_unit(parts[-1])
    uncertain = name.startswith("u_")
    label = _LABELS.get(name, name.removeprefix("u_").replace("_", " "))
    label = f"u({label})" if uncertain else label
    if len(parts) > 1:
        label = f"{' '.join(parts[:-1]).replace('_', ' ')}: {label}"
    text = value_in_words(value)
    plain_number = isinstance(value, int | float) and not isinstance(value, bool)
    several = isinstance(value, list | tuple) and all(isinstance(one, int | float) for one in value) and len(value) <= MOST_VALUES
    return label, f"{text} {unit}".replace(" °", "°") if unit and (plain_number or several) and text != "not known" else text


def value_in_words(value: Any) -> str:
    """A value as text; long lists are counted, not printed."""
    if value is None:
        return "not given"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return compact(value, 6)
    if isinstance(value, list | tuple):
        if len(value) > MOST_VALUES:
            return f"{len(value)} values, see result.json"
        return ", ".join(value_in_words(one) for one in value)
    if isinstance(value, Mapping):
        return "; ".join(" ".join(in_words(str(key), one)) for key, one in value.items())
    return str(value)


def _split_unit(name: str) -> tuple[str, str]:
    for ending in sorted(_UNITS, key=len, reverse=True):
        if name.endswith(f"_{ending}"):
            base = name.removesuffix(f"_{ending}")
            return (f"{base} rate" if ending == "fps" else base), show_unit(_UNITS[ending])
    return name, ""
