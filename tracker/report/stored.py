"""Reads a result folder back, of this version or an older one."""

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from calibration.notice import BadInput, Notice
from tracker.analysis.quantity import BudgetLine, Quantity
from tracker.report.tables import FORMAT, FORMAT_VERSION
from tracker.result import Prediction

__all__ = ["StoredResult", "is_result_folder", "read_result"]

_CONTRACT = {"value", "unit", "u", "U", "k", "dof", "interval", "u_run", "window_s", "definition", "budget"}


@dataclass(frozen=True, slots=True, eq=False)
class StoredResult:
    """A run as it stands in its folder."""

    folder: Path
    format_version: int
    kind: str
    batch: str | None
    specimen: str | None
    quantities: dict[str, Quantity]
    predictions: tuple[Prediction, ...]
    warnings: tuple[Notice, ...]
    document: dict[str, Any]  # all of result.json

    @property
    def clip_sha256(self) -> str | None:
        """Hash of the clip that was measured."""
        return self._input("clip", "sha256")

    @property
    def clip_path(self) -> Path:
        """Where the clip lay when it was measured, seen from where the folder is now."""
        return self.folder / (self._input("clip", "path") or "")

    @property
    def sheet_path(self) -> Path:
        """Where the run sheet lay, seen from where the folder is now."""
        return self.folder / (self._input("sheet", "path") or "")

    def frames(self) -> pd.DataFrame:
        """frames.csv as a table; empty fields are NaN, flags are text.

        Raises
        ------
        BadInput
            frames.csv is missing or broken.
        """
        path = self.folder / "frames.csv"
        try:
            return pd.read_csv(path, encoding="utf-8", dtype={"flags": "string"}, keep_default_na=True).fillna({"flags": ""})
        except (OSError, ValueError) as error:
            raise BadInput(f"{path} cannot be read: {error}.", "Measure the run again.") from None

    def _input(self, which: str, key: str) -> str | None:
        value = self.document.get("inputs", {}).get(which, {}).get(key)
        return value if isinstance(value, str) else None


def is_result_folder(folder: Path) -> bool:
    """Whether this is a folder that Linefall wrote."""
    try:
        return bool(json.loads((folder / "result.json").read_text(encoding="utf-8")).get("format") == FORMAT)
    except (OSError, ValueError, AttributeError):
        return False


def read_result(folder: Path) -> StoredResult:
    """Read a result folder.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    StoredResult

    Raises
    ------
    BadInput
        No such folder, no result in it, not JSON, or written by a later Linefall.
    """
    path = folder / "result.json"
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadInput(f"{folder} holds no result.json.", "Name a folder that linefall measure wrote.") from None
    except OSError as error:
        raise BadInput(f"{path} cannot be read: {error.strerror}.", "Check that it is yours to read.") from None
    except ValueError as error:
        raise BadInput(f"{path} is not JSON: {error}.", "It was changed or cut short: measure the run again.") from None
    if not isinstance(content, dict) or content.get("format") != FORMAT:
        raise BadInput(f"{path} is not a result of Linefall.", "Name a folder that linefall measure wrote.")
    number = content.get("format_version")
    if not isinstance(number, int) or number > FORMAT_VERSION:
        raise BadInput(
            f"{path} has format version {number}; this Linefall reads up to {FORMAT_VERSION}.", "Install the newer Linefall."
        )
    try:
        return _stored(folder, number, content)
    except (KeyError, TypeError, ValueError) as error:
        raise BadInput(f"{path} lacks what a result has: {error}.", "It was changed by hand: measure the run again.") from None


def _stored(folder: Path, number: int, content: dict[str, Any]) -> StoredResult:
    return StoredResult(
        folder=folder,
        format_version=number,
        kind=str(content["kind"]),
        batch=content.get("batch"),
        specimen=content.get("specimen"),
        quantities={name: _quantity(item) for name, item in content["results"].items()},
        predictions=tuple(_prediction(item) for item in content["predictions"]),
        warnings=tuple(Notice(**{key: item[key] for key in Notice.__slots__}) for item in content["warnings"]),
        document=content,
    )


def _float(value: Any, absent: float = math.nan) -> float:
    return absent if value is None else float(value)


def _quantity(item: dict[str, Any]) -> Quantity:
    window = item["window_s"]
    low, high = item["interval"]
    return Quantity(
        value=_float(item["value"]), unit=str(item["unit"]), u=_float(item["u"]), U=_float(item["U"]), k=_float(item["k"]),
        dof=_float(item["dof"], math.inf), interval=(_float(low), _float(high)), u_run=_float(item["u_run"]),
        window_s=None if window is None else (_float(window[0]), _float(window[1])), definition=str(item["definition"]),
        budget=tuple(_budget_line(line) for line in item["budget"]),
        extra={key: value for key, value in item.items() if key not in _CONTRACT},
    )  # fmt: skip


def _budget_line(item: dict[str, Any]) -> BudgetLine:
    return BudgetLine(
        source=str(item["source"]), u=_float(item["u"]), c=_float(item["c"]), kind=item["kind"],
        dof=_float(item["dof"], math.inf), shared=item["shared"], id=str(item["id"]), unit=str(item.get("unit", "")),
    )  # fmt: skip


def _prediction(item: dict[str, Any]) -> Prediction:
    return Prediction(
        name=str(item["name"]), law=str(item["law"]), value=_float(item["value"]), u=_float(item["u"]),
        unit=str(item["unit"]), difference=_float(item["difference"]), u_difference=_float(item["u_difference"]),
        says=str(item["says"]),
    )  # fmt: skip
