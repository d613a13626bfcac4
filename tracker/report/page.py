"""The report page: one HTML file that needs no network, prints on A4 in grey, and reads aloud."""

import base64
import json
import math
import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import cv2
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup, escape

from tracker.analysis.quantity import BudgetLine, Quantity
from tracker.report.figures import columns, is_lopsided, k_text, number, part_text, percent, places_for, rounded
from tracker.report.names import KIND_LABELS, name_of, show_unit
from tracker.report.overlay import Still
from tracker.report.plain import plain, sha256_of
from tracker.report.plots import Plot
from tracker.report.tables import software, written_at
from tracker.report.verdict import agrees, verdict
from tracker.report.wording import compact, flat, in_words, value_in_words
from tracker.result import Prediction, Result

__all__ = ["CAUTIONS", "page"]

CAUTIONS = (
    "Keep everyone out of the drop zone and out of every bight while line can move.",
    "Guard the container and the path of the free end, so that nobody can reach into running line.",
    "Wear eye and face protection; a free end, a bead or a splinter can fly.",
    "Tie no line to a person, and wear nothing that a line can catch.",
    "Secure the path of the free end, and look at the whole rig, not at single parts, before the next release.",
    "The lab's own procedures, local codes and qualified staff decide; where they differ from this page, they are right.",
)
JPEG_QUALITY = 88


def page(result: Result, plots: Sequence[Plot] = (), stills: Sequence[Still] = (), *, has_overlay: bool = False) -> str:
    """The whole page.

    Parameters
    ----------
    result : Result
    plots : sequence of Plot
    stills : sequence of Still
        The first is the one to look at.
    has_overlay : bool
        Whether overlay.mp4 stands beside the page.

    Returns
    -------
    str
        HTML with everything inside it.
    """
    said = verdict(result)
    portrait = not stills or stills[0].picture.shape[0] >= stills[0].picture.shape[1]
    html: str = _template().render(
        title=_title(result),
        kind=KIND_LABELS.get(result.kind, result.kind),
        verdict=said,
        window=_headline_window(result),
        written_at=written_at().replace("T", " ").replace("Z", " UTC"),
        software=software(),
        clip_name=result.clip_path.name,
        clip_sha256=result.clip_sha256,
        sheet_name=result.sheet_path.name,
        sheet_sha256=sha256_of(result.sheet_path),
        stills=[_picture(one, said.label) for one in stills],
        shape="upright" if portrait else "lying",
        has_overlay=has_overlay,
        quantities=[_quantity(name, quantity) for name, quantity in result.quantities.items()],
        predictions=[_prediction(item) for item in result.predictions],
        warnings=result.warnings,
        # Our own drawings, their texts escaped where they were made.
        plots=[{"svg": Markup(_inline(plot))} for plot in plots if plot.stem != "budget"],
        budget_plot=next((Markup(_inline(plot)) for plot in plots if plot.stem == "budget"), ""),
        budgets=[_budget(name, quantity) for name, quantity in result.quantities.items() if quantity.budget],
        filmed=_filmed(result),
        edits=[[value_in_words(plain(edit.get(key, ""))) for key in _edit_keys(result)] for edit in result.edits],
        edit_keys=_edit_keys(result),
        defaults=[(key, _default(plain(value))) for key, value in result.defaults.items()],
        settings=_settings(plain(result.sheet)),
        cautions=CAUTIONS,
    )
    return html


def _template() -> Any:
    room = Environment(
        loader=FileSystemLoader(Path(__file__).parent), autoescape=True, undefined=StrictUndefined, trim_blocks=True,
    )  # fmt: skip
    room.filters.update(minus=_minus, sentence=_sentence, subscript=_subscript)
    return room.get_template("report.html")


_PARTED = re.compile(r"(?<=\d) (?=(?:mm|m|s|px|%|m/s|m/s²|kg|frames/s|[±×])(?![\w/²]))|(?<=[±×]) (?=\d)")


def _minus(text: str) -> str:
    """A hyphen before a digit becomes a minus sign, which is read aloud as one; no line ends between number and unit."""
    return _PARTED.sub("\u00a0", re.sub(r"(?<![\w.-])-(?=\d)", "−", str(text)))


def _sentence(text: str) -> str:
    return text if text[1:2] == "(" else text[:1].upper() + text[1:]  # u(offset) is not U(offset)


def _subscript(symbol: str) -> Markup:
    """``v_peak`` with its subscript set low."""
    parts = (re.sub(r"_(\w+)", r"<sub>\1</sub>", str(escape(part))) for part in symbol.split("/"))
    return Markup("/".join(parts))


def _title(result: Result) -> str:
    test = result.sheet.get("test", {})
    who = [f"{word} {test[word]}" for word in ("batch", "specimen") if test.get(word)]
    return "Run report, " + (", ".join(who) if who else result.sheet_path.stem)


def _headline_window(result: Result) -> str:
    for quantity in result.quantities.values():  # the headline stands first
        return "" if quantity.window_s is None else "{:.3f} s to {:.3f} s".format(*quantity.window_s)
    return ""


def _quantity(name: str, quantity: Quantity) -> dict[str, str]:
    words, (value, spread) = name_of(name, quantity.unit), columns(quantity)
    lopsided = is_lopsided(quantity)
    extra = "; ".join(" ".join(in_words(key, plain(value))) for key, value in quantity.extra.items())
    return {
        "label": words.label, "symbol": words.symbol, "definition": quantity.definition or words.meaning,
        "extra": f"{_sentence(extra)}." if extra else "", "value": value, "spread": spread,
        "unit": show_unit(quantity.unit), "k": k_text(quantity.k) if spread and not lopsided else "",
        "dof": _dof(quantity.dof) if spread else "",
        "window": "" if quantity.window_s is None else "{:.3f} to {:.3f}".format(*quantity.window_s),
    }  # fmt: skip


def _dof(dof: float) -> str:
    """Degrees of freedom, cut, not rounded (JCGM 100:2008, G.4.1)."""
    return "∞" if not math.isfinite(dof) or dof > 1e4 else f"{math.floor(dof)}"


def _prediction(item: Prediction) -> dict[str, str]:
    difference, u = rounded(item.difference, item.u_difference)
    places = places_for(item.u_difference) if item.u_difference > 0 and math.isfinite(item.u_difference) else 4
    return {
        "label": name_of(item.name, item.unit).label, "law": _sentence(item.law), "says": item.says,
        "value": number(item.value, places), "difference": difference, "u": u or "not known", "unit": show_unit(item.unit),
        "agrees": "yes" if agrees(item) else "no",
    }  # fmt: skip


def _budget(name: str, quantity: Quantity) -> dict[str, Any]:
    unit = show_unit(quantity.unit)
    own = part_text(quantity.u_run, quantity.unit) if quantity.u_run > 0 else ""
    return {
        "label": name_of(name, quantity.unit).label, "u": part_text(quantity.u, quantity.unit), "u_run": own,
        "per_unit": f" / {unit}" if unit else "",
        "lines": [_budget_line(line, quantity) for line in quantity.budget],
    }  # fmt: skip


def _budget_line(line: BudgetLine, quantity: Quantity) -> dict[str, str]:
    unit, of_result = show_unit(line.unit), show_unit(quantity.unit)
    u = compact(line.u, 2)
    above = f"({of_result})" if "/" in of_result else of_result or "1"
    per = f"{above}/{unit}" if unit and unit != of_result else ""
    return {
        "source": line.source, "u": f"{u}{unit if unit == '°' else f' {unit}' if unit else ''}",
        "c": f"{compact(line.c, 3)} {per}".strip(), "part": part_text(line.part, "1"), "share": percent(line, quantity.u),
        "kind": line.kind, "dof": _dof(line.dof), "shared": _SHARED.get(line.shared, line.shared),
    }  # fmt: skip


_SHARED = {"run": "this run only", "station": "station", "board": "board", "lens": "lens", "site": "site"}


def _filmed(result: Result) -> list[tuple[str, list[tuple[str, str]]]]:
    tables = (("Clock: frames to seconds", result.clock), ("Plane: pixels to metres", result.plane), ("Clip", result.clip))
    return [(name, [in_words(key, value) for key, value in flat(plain(table))]) for name, table in tables if table]


def _settings(sheet: Mapping[str, Any]) -> list[tuple[str, list[str]]]:
    """The sheet table by table, each key as it would be written in it."""
    tables = {name: table if isinstance(table, Mapping) else {"": table} for name, table in sheet.items()}
    return [(name, [_setting(key, value) for key, value in flat(table) if value is not None]) for name, table in tables.items()]


def _setting(key: str, value: Any) -> str:
    # A string with quotes, a number with a point, a list in brackets: JSON writes these as TOML does.
    text = json.dumps(value, ensure_ascii=False)
    return f"{key} = {text}" if key else text


def _edit_keys(result: Result) -> list[str]:
    return list(dict.fromkeys(key for edit in result.edits for key in edit))


def _default(value: Any) -> str:
    if isinstance(value, Mapping) and "amount" in value:
        unit = show_unit(str(value.get("unit", "")))
        amount = value_in_words(value["amount"])
        why = value.get("why")
        return f"{amount} {unit}".strip() + (f": {why}" if why else "")
    return value_in_words(value)


def _picture(one: Still, label: str) -> dict[str, Any]:
    done, data = cv2.imencode(".jpg", one.picture, [cv2.IMWRITE_JPEG_QUALITY, JPEG_QUALITY])
    if not done:
        raise ValueError(f"The picture of frame {one.frame} could not be coded as JPEG.")
    return {
        "uri": "data:image/jpeg;base64," + base64.b64encode(data.tobytes()).decode("ascii"),
        "width": one.picture.shape[1], "height": one.picture.shape[0], "frame": one.frame, "words": one.words,
        "alt": f"Frame {one.frame} of the clip, {one.words}, with what was followed drawn over it for the {label}.",
    }  # fmt: skip


_SCREEN_COLOURS = {"#000000": "var(--ink)", "#ffffff": "var(--paper)", "#0072b2": "var(--blue)", "#b0b0b0": "var(--band)",
                   "#767676": "var(--rule)"}  # fmt: skip


def _inline(plot: Plot) -> str:
    """The drawing as part of a page: no outside names, ids of its own, colours that follow light and dark, words for who cannot see it."""
    svg = plot.svg[plot.svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r'\sxmlns(:\w+)?="[^"]*"', "", svg).replace("xlink:href", "href")
    svg = re.sub(r'\bid="', f'id="{plot.stem}-', svg)
    svg = re.sub(r"url\(#", f"url(#{plot.stem}-", svg)
    svg = re.sub(r'href="#', f'href="#{plot.stem}-', svg)
    for colour, name in _SCREEN_COLOURS.items():
        svg = svg.replace(colour, name)
    svg = re.sub(r'(<svg[^>]*?)\swidth="[^"]*"', r"\1", re.sub(r'(<svg[^>]*?)\sheight="[^"]*"', r"\1", svg, count=1), count=1)
    return svg.replace("<svg", f'<svg role="img" aria-label="{escape(_minus(plot.alt))}"', 1)
