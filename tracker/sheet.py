"""The run sheet: what a technician writes beside a clip, read, merged with its station sheet, and checked.

A sheet is TOML with SI units in its keys. Unknown keys are refused with the nearest known one; a number far
outside what a bench can have is refused with the unit that was probably meant; any number may carry its
standard uncertainty as `u_<key>`. What the sheet leaves out comes from `defaults.py` and is listed in the result.
"""

import difflib
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Literal, get_args

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from calibration.notice import BadInput
from tracker.defaults import DEFAULT_U, Default

__all__ = [
    "KINDS", "Bench", "Kind", "Section", "Sheet", "SheetFile", "bench_of", "load_sheet", "read_toml", "sections",
    "sheet_from_tables", "sheet_keys",
]  # fmt: skip

Kind = Literal["payout", "surface-drop", "held-drop", "edge-slide", "free-drop", "drawn"]
KINDS: tuple[str, ...] = get_args(Kind)
Pixel = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Bench:
    """The range a number can have on a bench; outside it the unit is probably wrong."""

    low: float
    high: float


class Section(BaseModel):
    """One table of the sheet. `u_<key>` of any number is taken aside into `uncertainties`."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=False)
    uncertainties: dict[str, float] = Field(default_factory=dict, exclude=True)

    @model_validator(mode="before")
    @classmethod
    def _take_uncertainties_aside(cls, data: Any) -> Any:
        if not isinstance(data, Mapping):
            return data
        plain: dict[str, Any] = {}
        aside: dict[str, float] = {}
        for key, value in data.items():
            base = key.removeprefix("u_")
            if key.startswith("u_") and base in cls.model_fields:
                if isinstance(value, bool) or not isinstance(value, int | float) or not 0 <= value < math.inf:
                    raise ValueError(f"{key} is {value!r}; a standard uncertainty is a number from 0 upwards")
                aside[base] = float(value)
            else:
                plain[key] = value
        if aside:
            plain["uncertainties"] = aside
        return plain


class ClipTable(Section):
    """Which clip, and which part of it."""

    file: str
    window_s: tuple[float, float] | None = None


class ClockTable(Section):
    """How frames become seconds."""

    capture_fps: Annotated[float, Bench(1, 20000)] | None = Field(None, gt=0)
    readout_s: Annotated[float, Bench(-0.1, 0.1)] | None = None
    exposure_s: Annotated[float, Bench(1e-6, 0.1)] | None = Field(None, gt=0)


class BoardTable(Section):
    """The reference board and where it hangs."""

    kind: Literal["checkerboard", "charuco", "marks"] = "checkerboard"
    inner_corners: tuple[int, int] = (9, 6)
    square_m: Annotated[float, Bench(0.003, 0.3)] | None = Field(None, gt=0)
    marker_m: Annotated[float, Bench(0.002, 0.3)] | None = Field(None, gt=0)
    dictionary: str | None = None
    offset_m: Annotated[float, Bench(-2, 2)] = 0.0
    lean_deg: Annotated[float, Bench(-45, 45)] = 0.0
    yaw_deg: Annotated[float, Bench(-45, 45)] = 0.0
    file: str | None = None
    marks_m: list[float] | None = None
    marks_px: list[Pixel] | None = None

    @model_validator(mode="after")
    def _complete(self) -> "BoardTable":
        if min(self.inner_corners) < 2:
            raise ValueError(
                f"inner_corners is {list(self.inner_corners)}; count the inner corners, at least 2 each way"
            )
        if self.kind == "marks":
            if (
                not self.marks_m
                or not self.marks_px
                or len(self.marks_m) != len(self.marks_px)
                or len(self.marks_m) < 2
            ):
                raise ValueError(
                    'a board of kind "marks" needs marks_m and marks_px, two or more of each, as many of one as of the other'
                )
        elif self.square_m is None:
            raise ValueError("square_m is missing: the side of one square in metres, as 0.025")
        if self.kind == "charuco" and (self.marker_m is None or self.dictionary is None):
            raise ValueError("a charuco board needs marker_m and dictionary")
        return self


class CameraTable(Section):
    """The camera and its distance."""

    lens: str | None = None
    distance_m: Annotated[float, Bench(0.1, 50)] | None = Field(None, gt=0)


class DatumTable(Section):
    """Where the world begins and which way is up."""

    origin_px: Pixel
    origin_frame: int = Field(0, ge=0)
    floor_px: Pixel | None = None
    vertical: Literal["board", "plumb"] = "board"
    plumb_px: tuple[Pixel, Pixel] | None = None

    @model_validator(mode="after")
    def _plumb_has_points(self) -> "DatumTable":
        if self.vertical == "plumb" and self.plumb_px is None:
            raise ValueError(
                'vertical is "plumb" but plumb_px is missing: two pixels on the plumb line, [[x, y], [x, y]]'
            )
        return self


class LineTable(Section):
    """The line under test, or the object dropped."""

    kind: str = ""
    pitch_m: Annotated[float, Bench(0.0003, 1.0)] | None = Field(None, gt=0)
    mark_spacing_m: Annotated[float, Bench(0.01, 20)] | None = Field(None, gt=0)
    end_mark_m: Annotated[float, Bench(0.001, 0.5)] | None = Field(None, gt=0)
    length_m: Annotated[float, Bench(0.05, 500)] | None = Field(None, gt=0)
    mass_per_length_kg_per_m: Annotated[float, Bench(0.0005, 50)] | None = Field(None, gt=0)
    object_diameter_m: Annotated[float, Bench(0.002, 0.5)] | None = Field(None, gt=0)
    object_mass_kg: Annotated[float, Bench(0.0005, 50)] | None = Field(None, gt=0)


class TestTable(Section):
    """What is tested."""

    kind: Kind
    drop_height_m: Annotated[float, Bench(0.05, 50)] | None = Field(None, gt=0)
    pile_depth_m: tuple[float, float] | None = None
    landing_rise_m: Annotated[float, Bench(-1, 1)] = 0.0
    out_of_plane_m: Annotated[float, Bench(0, 1)] | None = Field(None, ge=0)
    batch: str | None = None
    specimen: str | None = None


class SiteTable(Section):
    """Where the bench stands."""

    gravity_mps2: Annotated[float, Bench(9.7, 9.9)] | None = Field(None, gt=0)
    latitude_deg: float | None = Field(None, ge=-90, le=90)
    height_m: Annotated[float, Bench(-500, 6000)] | None = None
    drop_check: str | None = None


class Limit(BaseModel):
    """A limit on one quantity and the rule by which it is decided."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    min: float | None = None
    max: float | None = None
    rule: Literal["guarded", "simple"] = "guarded"
    guard_r: float = Field(1.0, ge=0)
    applies_to: Literal["run", "batch-mean", "tolerance"] = "run"


class Sheet(BaseModel):
    """A whole run sheet, merged and checked."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    clip: ClipTable
    clock: ClockTable = ClockTable()  # type: ignore[call-arg]  # the pydantic plugin is not loaded; all keys are optional
    board: BoardTable
    camera: CameraTable = CameraTable()  # type: ignore[call-arg]
    datum: DatumTable
    line: LineTable = LineTable()  # type: ignore[call-arg]
    test: TestTable
    site: SiteTable = SiteTable()  # type: ignore[call-arg]
    limits: dict[str, Limit] = Field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class SheetFile:
    """A sheet with the place it came from, and the lookup of uncertainties with their defaults."""

    sheet: Sheet
    path: Path
    tables: dict[str, Any]  # as merged, before defaults
    station: str | None = None  # the station sheet that was pulled in
    used_defaults: dict[str, Default] = field(default_factory=dict)  # filled by u() and by note_default()

    def beside(self, name: str) -> Path:
        """Path of a file that the sheet names, relative to the sheet."""
        return (self.path.parent / Path(name.replace("\\", "/"))).resolve()

    @property
    def clip_path(self) -> Path:
        """The clip."""
        return self.beside(self.sheet.clip.file)

    def u(self, key: str, value: float | None = None) -> float:
        """Standard uncertainty of `table.key`: the sheet's own, else the default, which is noted as used.

        Parameters
        ----------
        key : str
            As in ``board.square_m``.
        value : float, optional
            The number it belongs to, where the default is relative.

        Returns
        -------
        float
            In the unit of the key.
        """
        table, name = key.split(".")
        given = getattr(self.sheet, table).uncertainties
        if name in given:
            return float(given[name])
        default = DEFAULT_U[key]
        amount = default.amount * abs(value) if default.relative and value is not None else default.amount
        self.used_defaults[f"{table}.u_{name}"] = Default(amount, False, default.unit, default.why)
        return amount

    def note_default(self, key: str, amount: float, unit: str, why: str) -> float:
        """Note a value that the sheet left out and that was filled in; returns it."""
        self.used_defaults[key] = Default(amount, False, unit, why)
        return amount


def sheet_keys() -> list[str]:
    """Every key of a run sheet as ``table.key``, for the manual and for nearest-key suggestions."""
    keys = ["station"]
    for table, model in sections().items():
        keys += [f"{table}.{name}" for name in model.model_fields if name != "uncertainties"]
    return [*keys, "limits.<quantity>"]


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file, with a sentence where it cannot be read.

    Raises
    ------
    BadInput
        No such file, not UTF-8, or not TOML.
    """
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise BadInput(f"{path}: there is no such file.", "Check the name, or write the run sheet first.") from None
    except IsADirectoryError:
        raise BadInput(f"{path} is a folder, not a run sheet.", "Name the .toml file in it.") from None
    except UnicodeDecodeError:
        raise BadInput(
            f"{path} is not UTF-8 text.", "A run sheet is a text file; the clip is named inside it."
        ) from None
    except OSError as error:
        if path.is_dir():
            raise BadInput(f"{path} is a folder, not a run sheet.", "Name the .toml file in it.") from None
        raise BadInput(f"{path} cannot be read: {error.strerror}.", "Check that it is yours to read.") from None
    try:
        return tomllib.loads(text.replace("\r\n", "\n"))
    except tomllib.TOMLDecodeError as error:
        quotes = "In a name with backslashes use single quotes: file = 'clips\\run.mp4'."
        hint = quotes if "\\" in text else "See the sample sheets."
        raise BadInput(f"{path.name} is not valid TOML: {error}.", hint) from None


def load_sheet(path: Path) -> SheetFile:
    """Read a run sheet, pull in its station sheet, check every key.

    Parameters
    ----------
    path : Path

    Returns
    -------
    SheetFile

    Raises
    ------
    BadInput
        One sentence with file, key, what was found and what to do.
    """
    return sheet_from_tables(read_toml(path), path)


def sheet_from_tables(tables: dict[str, Any], path: Path) -> SheetFile:
    """Check tables that were read from `path` (or put together for it)."""
    merged = dict(tables)
    station = merged.pop("station", None)
    if station is not None:
        if not isinstance(station, str):
            raise BadInput(f"{path.name}: station is {station!r}.", 'It names a file: station = "bench-2.toml".')
        base = read_toml((path.parent / Path(station.replace("\\", "/"))).resolve())
        if "station" in base:
            raise BadInput(f"{station}: a station sheet cannot name another station.", "Delete its station line.")
        merged = _merge(base, merged)
    _refuse_unknown_keys(merged, path)
    _refuse_wrong_units(merged, path)
    try:
        sheet = Sheet.model_validate(merged)
    except ValidationError as error:
        raise _plain(error, path) from None
    if any(not letter.isprintable() for letter in sheet.clip.file):
        raise BadInput(
            f"{path.name}: clip.file is {sheet.clip.file!r}, a backslash was read as an escape.",
            "Use single quotes, file = 'clips\\run.mp4', or forward slashes.",
        )
    if (window := sheet.clip.window_s) is not None and not window[0] < window[1]:
        raise BadInput(
            f"{path.name}: clip.window_s is {list(window)}, which is empty.",
            "Write [from, to] in seconds, from below to.",
        )
    return SheetFile(sheet, path.resolve(), merged, station)


def _merge(base: dict[str, Any], over: dict[str, Any]) -> dict[str, Any]:
    out = dict(base)
    for key, value in over.items():
        old = out.get(key)
        out[key] = {**old, **value} if isinstance(old, dict) and isinstance(value, dict) else value
    return out


def sections() -> dict[str, type[Section]]:
    """The tables of a run sheet by name."""
    return {
        name: info.annotation
        for name, info in Sheet.model_fields.items()
        if isinstance(info.annotation, type) and issubclass(info.annotation, Section)
    }


def _refuse_unknown_keys(tables: dict[str, Any], path: Path) -> None:
    models = sections()
    known_tables = [*models, "limits", "station"]
    everywhere = {f"{t}.{k}" for t, m in models.items() for k in m.model_fields if k != "uncertainties"}
    for table, content in tables.items():
        if table not in known_tables:
            near = _nearest(table, [*known_tables, *(k.split(".")[1] for k in everywhere)])
            raise BadInput(f'{path.name}: there is no table or key "{table}" at the top of a run sheet.', near)
        if table == "limits":
            continue
        if not isinstance(content, dict):
            raise BadInput(
                f"{path.name}: {table} is {content!r}, but it is a table.", f"Write [{table}] and its keys below it."
            )
        fields = [k for k in models[table].model_fields if k != "uncertainties"]
        for key in content:
            if key in fields or (key.startswith("u_") and key[2:] in fields):
                continue
            homes = [full for full in sorted(everywhere) if full.split(".")[1] == key]
            remedy = (
                f"It belongs into [{homes[0].split('.')[0]}]."
                if homes
                else _nearest(key, [*fields, *(f"u_{f}" for f in fields)])
            )
            raise BadInput(f'{path.name}: [{table}] has no key "{key}" (found {key} = {content[key]!r}).', remedy)


def _nearest(key: str, known: list[str]) -> str:
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
    return f'Did you mean "{near[0]}"?' if near else "Known here: " + ", ".join(sorted(set(known))) + "."


def _refuse_wrong_units(tables: dict[str, Any], path: Path) -> None:
    """A value outside every bench is refused, and where a power of ten brings it inside, that is said."""
    for table, model in sections().items():
        content = tables.get(table)
        if not isinstance(content, dict):
            continue
        for key in model.model_fields:
            bench = bench_of(model, key)
            value = content.get(key)
            if bench is None or isinstance(value, bool) or not isinstance(value, int | float):
                continue
            if not math.isfinite(value):
                raise BadInput(f"{path.name}: {table}.{key} is {value}.", "Write a finite number.")
            if bench.low <= value <= bench.high:
                continue
            raise BadInput(
                f"{path.name}: {table}.{key} is {value:g}, outside the {bench.low:g} to {bench.high:g} that a bench can have.",
                _probable_unit(key, float(value), bench),
            )


def bench_of(model: type[Section], key: str) -> Bench | None:
    """The range that a bench can have for a key, where one is stated."""
    return next((m for m in _metadata(model.model_fields[key]) if isinstance(m, Bench)), None)


def _metadata(info: Any) -> list[Any]:
    """Annotated metadata of a field, also inside ``Annotated[...] | None``."""
    found = list(info.metadata)
    for part in get_args(info.annotation):
        found += list(getattr(part, "__metadata__", ()))
    return found


def _probable_unit(key: str, value: float, bench: Bench) -> str:
    names: dict[str, dict[float, str]] = {
        "m": {1000: "millimetres", 100: "centimetres"},
        "s": {1000: "milliseconds", 1e6: "microseconds"},
        "kg": {1000: "grams"},
    }
    unit = key.rsplit("_", 1)[-1]
    fits = [(name, value / factor) for factor, name in names.get(unit, {}).items() if bench.low <= value / factor <= bench.high]
    if fits:
        return " ".join(f"If {name} were meant, write {inside:g}." for name, inside in fits)
    for factor in (10.0, 100.0, 1000.0, 0.1, 0.01, 0.001):
        if bench.low <= value / factor <= bench.high and value != 0:
            return f"A factor of {factor:g} too {'large' if factor > 1 else 'small'}? {value / factor:g} would be possible."
    return "Check the unit: lengths are in metres, times in seconds."


def _plain(error: ValidationError, path: Path) -> BadInput:
    """The first fault of a pydantic report as one sentence."""
    fault = error.errors()[0]
    where = ".".join(str(part) for part in fault["loc"])
    if fault["type"] == "missing":
        key = str(fault["loc"][-1])
        if len(fault["loc"]) == 1:
            return BadInput(f"{path.name}: the table [{key}] is missing.", f"Add [{key}]; see the sample sheets.")
        return BadInput(f"{path.name}: {where} is missing.", _what_to_write(where))
    if fault["type"] == "value_error":
        return BadInput(f"{path.name}: [{where}] {fault['ctx']['error']!s}.")
    found = fault.get("input")
    if fault["type"] == "literal_error":
        choices = fault["ctx"]["expected"]
        words = [w.strip().strip("'") for w in choices.replace(" or ", ", ").split(",")]
        near = difflib.get_close_matches(str(found), words, n=1, cutoff=0.4)
        hint = f'Did you mean "{near[0]}"?' if near else f"Use one of {choices}."
        return BadInput(f"{path.name}: {where} is {found!r}.", hint)
    return BadInput(
        f"{path.name}: {where} is {found!r}: {fault['msg'][0].lower() + fault['msg'][1:]}.", _what_to_write(where)
    )


def _what_to_write(where: str) -> str:
    words = {
        "clip.file": 'Name the clip beside the sheet: file = "run-07.mp4".',
        "datum.origin_px": "Give column and row of the rim (payout) or of the release point (drop) in the upright picture: "
        "origin_px = [612.0, 410.5].",
        "test.kind": "Say what is tested: " + ", ".join(f'"{kind}"' for kind in KINDS) + ".",
    }
    return words.get(where, "See the sample sheets for how it is written.")
