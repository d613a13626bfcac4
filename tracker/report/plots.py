"""Plots of one run, as SVG with real text and as PNG, the same to the byte for the same result.

Data are black points, models coloured lines, U is a band, windows are shaded and named, gaps stay gaps, and what was
flagged stays visible, hollow. The title is the finding; a curve is named at its end. Matplotlib is used by its objects
alone, without the state that pyplot keeps.
"""

import io
import re
import textwrap
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from tracker.analysis.quantity import Quantity
from tracker.report.colours import ROLES
from tracker.report.figures import line, part_text, percent
from tracker.report.names import name_of, show_unit
from tracker.report.tables import flag_text
from tracker.result import Result

__all__ = ["Plot", "draw"]

Floats = NDArray[np.float64]
SIZE_IN = (4.8, 3.7)
BAND_K = 2.0
MM = 1000.0  # millimetres in a metre
MOST_BARS = 9
PNG_DPI = 150
LABEL_APART = 0.085  # of the height of a plot
STYLE: Any = {
    "svg.fonttype": "none", "svg.hashsalt": "linefall", "font.family": "DejaVu Sans", "font.size": 9.0,
    "axes.titlesize": 10.5, "axes.labelsize": 9.0, "axes.spines.top": False, "axes.spines.right": False,
    "axes.linewidth": 0.8, "axes.titlelocation": "left", "axes.titlepad": 10.0, "hatch.linewidth": 0.8,
    "lines.linewidth": 1.4, "mathtext.fontset": "dejavusans", "axes.unicode_minus": True, "path.simplify": False,
    "figure.facecolor": "white", "savefig.facecolor": "white", "axes.formatter.useoffset": False,
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Plot:
    """One plot as files hold it."""

    stem: str  # file name without its ending
    finding: str  # what it shows, as its title says
    alt: str  # for who cannot see it
    svg: str
    png: bytes


@dataclass(frozen=True, slots=True, eq=False)
class _Course:
    """One measured course over time."""

    column: str
    words: str  # quantity and symbol, as on the axis
    unit: str
    t: Floats
    value: Floats
    u: Floats
    flags: NDArray[np.bool_]
    reasons: tuple[str, ...]  # of each frame, empty where nothing is odd
    models: dict[str, Floats]
    windows: dict[str, tuple[float, float]]  # name of the window -> from, to


def draw(result: Result) -> tuple[Plot, ...]:
    """All plots that the result has data for.

    Parameters
    ----------
    result : Result

    Returns
    -------
    tuple of Plot
        Place over time, speed over time, length paid out, path, budget of the headline: whichever apply.
    """
    with matplotlib.rc_context(STYLE):
        plots = [_place(result), _speed(result), _paid_out(result), _path(result), _budget(result)]
    return tuple(plot for plot in plots if plot is not None)


def _place(result: Result) -> Plot | None:
    payout = result.kind == "payout"
    column, t_column = ("apex_z_m", "t_s") if payout else ("end_z_m", "end_t_s")
    words = "arc height above the rim h" if payout else "height above datum z"
    wanted = ("arc_height_m",) if payout else (
        "effective_acceleration_mps2", "measured_gravity_mps2", "acceleration_ratio", "growth_rate_per_s",
        "friction_coefficient", "fold_coefficient", "landing_coefficient",
    )  # fmt: skip
    endings = ("_arc_height_m", "apex_z_m") if payout else ("_z_m",)
    course = _course(result, column, t_column, f"u_{column}", words, "m", endings, wanted)
    if course is None:
        return None
    finding = _finding(result, wanted) or _span(course)
    return _over_time(course, "arc-height" if payout else "height", finding, residuals=True)


def _speed(result: Result) -> Plot | None:
    of_line = result.kind in ("payout", "drawn")
    wanted = ("line_speed_mps", "peak_end_speed_mps", "speed_ripple")
    t_column, words = ("t_s", "line speed v") if of_line else ("end_t_s", "speed of the end v")
    course = _course(result, "line_speed_mps", t_column, "u_line_speed_mps", words, "m/s", ("_speed_mps",), wanted)
    if course is None:
        return None
    return _over_time(course, "line-speed", _finding(result, wanted) or _span(course), residuals=False)


def _paid_out(result: Result) -> Plot | None:
    wanted = ("length_paid_out_m",)
    course = _course(result, "paid_out_m", "t_s", "", "length paid out s", "m", ("_paid_out_m",), wanted)
    if course is None:
        return None
    return _over_time(course, "length-paid-out", _finding(result, wanted) or _span(course), residuals=False)


def _finding(result: Result, names: Sequence[str]) -> str:
    for name in names:
        if name in result.quantities:
            text = line(name, result.quantities[name])
            return text[0].upper() + text[1:]
    return ""


def _course(
    result: Result, column: str, t_column: str, u_column: str, words: str, unit: str, endings: tuple[str, ...],
    wanted: tuple[str, ...],
) -> _Course | None:  # fmt: skip
    table = result.frames
    value = _numbers(table, column)
    if np.isfinite(value).sum() < 2:
        return None
    t = _numbers(table, t_column)
    t = np.where(np.isfinite(t), t, _numbers(table, "t_s"))
    reasons = tuple(flag_text(cell) for cell in table["flags"]) if "flags" in table else ("",) * len(table)
    flags = np.array([bool(reason) for reason in reasons])
    models = {
        _model_name(name, endings): np.asarray(curve, dtype=float)
        for name, curve in result.model_curves.items()
        if name.endswith(endings) and len(curve) > 1
    }
    windows: dict[str, tuple[float, float]] = {}
    for name in wanted:
        quantity = result.quantities.get(name)
        if quantity is not None and quantity.window_s is not None and quantity.window_s not in windows.values():
            windows[name_of(name).label] = quantity.window_s
    return _Course(column, words, unit, t, value, _numbers(table, u_column), flags, reasons, models, windows)


def _notes(course: _Course) -> str:
    """Under the axis: what the band is, and why points are hollow."""
    notes = []
    if np.isfinite(course.u[np.isfinite(course.value)]).any():
        notes.append(f"grey: U of each frame (k = {BAND_K:.0f})")
    rows = zip(course.reasons, course.value, strict=True)
    counts = Counter(word for reason, value in rows if np.isfinite(value) for word in reason.split())
    if counts:
        told = ", ".join(f"{word} ({count})" for word, count in counts.most_common(2))
        notes.append(f"hollow: flagged {told}" + (" and others" if len(counts) > 2 else ""))
    return "".join(f"\n{note}" for note in notes)


def _numbers(table: Any, column: str) -> Floats:
    if column not in table:
        return np.full(len(table), np.nan)
    return np.asarray(table[column], dtype=float)


def _model_name(name: str, endings: tuple[str, ...]) -> str:
    ending = next(ending for ending in endings if name.endswith(ending))
    return name.removesuffix(ending).strip("_").replace("_", " ") or "model"


def _over_time(course: _Course, stem: str, finding: str, residuals: bool) -> Plot:
    base = _base(course) if residuals else None
    figure = Figure(figsize=SIZE_IN if base is None else (SIZE_IN[0], 1.22 * SIZE_IN[1]), layout="constrained")
    if base is None:
        upper = figure.subplots()
        last = upper
    else:
        upper, last = figure.subplots(2, 1, sharex=True, height_ratios=(2.4, 1.0))
    _windows(upper, course, named=True)
    _data(upper, course.t, course.value, course.u, course.flags)
    ends = [_model_line(upper, name, curve) for name, curve in course.models.items()]
    upper.set_ylabel(f"{course.words} / {show_unit(course.unit)}")
    _name_ends(upper, ends)
    if base is not None:
        _residuals(last, course, *base)
    last.set_xlabel("time after first frame t / s" + _notes(course))
    _title(figure, finding)
    return _finish(figure, stem, finding, _told(course, finding, base))


def _base(course: _Course) -> tuple[str, Floats] | None:
    """The curve against which residuals are shown: the law, else any model, else a quadratic fitted in the window."""
    for name in sorted(course.models, key=lambda name: not name.startswith("law")):
        return name, course.models[name]
    if not course.windows:
        return None
    low, high = next(iter(course.windows.values()))
    use = np.isfinite(course.value) & np.isfinite(course.t) & (course.t >= low) & (course.t <= high) & ~course.flags
    if use.sum() < 5:
        return None
    middle = (low + high) / 2
    fit = np.polynomial.Polynomial.fit(course.t[use] - middle, course.value[use], 2)
    t = np.linspace(low, high, 100)
    return "quadratic in the window", np.column_stack([t, fit(t - middle)])


def _windows(axes: Axes, course: _Course, named: bool) -> None:
    for name, (low, high) in course.windows.items():
        axes.axvspan(low, high, facecolor=ROLES["window"], alpha=0.3, edgecolor="none", zorder=0)
        for edge in (low, high):
            axes.axvline(edge, color="#767676", linewidth=0.6, zorder=0.5)
        if not named:
            continue
        known = course.t[np.isfinite(course.t)]
        side = "right" if (low + high) / 2 > known.min() + 0.6 * np.ptp(known) else "left"
        axes.annotate(
            f"window of {name}", (high if side == "right" else low, 1.0), xycoords=("data", "axes fraction"), xytext=(0, 2),
            textcoords="offset points", ha=side, va="bottom", fontsize=8,
        )  # fmt: skip


def _data(axes: Axes, t: Floats, value: Floats, u: Floats, flags: NDArray[np.bool_]) -> None:
    shown = np.isfinite(value)
    if np.isfinite(u[shown]).any():
        sure = np.where(flags, np.nan, u)  # no band where the point itself is in doubt
        axes.fill_between(t, value - BAND_K * sure, value + BAND_K * sure, color="#b0b0b0", linewidth=0, zorder=1)
    plain, odd = shown & ~flags, shown & flags
    axes.plot(t[plain], value[plain], ".", color=ROLES["measured"], markersize=3.2, zorder=2)
    axes.plot(t[odd], value[odd], "o", color=ROLES["excluded"], fillstyle="none", markersize=4.5, zorder=2.5)


def _model_line(axes: Axes, name: str, curve: Floats) -> tuple[float, float, str, str]:
    """Draws it and returns where its name goes."""
    colour, dash = _look(name)
    axes.plot(curve[:, 0], curve[:, 1], color=colour, linestyle=dash, zorder=3)
    known = curve[np.isfinite(curve).all(axis=1)]
    x, y = (known[-1] if len(known) else (np.nan, np.nan))
    return float(x), float(y), name, colour


def _look(name: str) -> tuple[str, Any]:
    if name.startswith("free fall"):
        return ROLES["free fall"], (0, (5, 2))
    if name.startswith("law") or name.startswith("quadratic"):
        return ROLES["law"], "solid"
    return ROLES["other model"], (0, (5, 2, 1, 2))


def _name_ends(axes: Axes, ends: Sequence[tuple[float, float, str, str]]) -> None:
    """Each curve's name right of the plot, tied to its end by a thin line; names that would touch move apart."""
    known = sorted((end for end in ends if np.isfinite(end[:2]).all()), key=lambda end: end[1])
    if not known:
        return
    axes.autoscale_view()
    low, high = axes.get_ylim()
    apart = LABEL_APART * (high - low)
    heights = [end[1] for end in known]
    for i in range(1, len(heights)):
        heights[i] = max(heights[i], heights[i - 1] + apart)
    shift = (sum(heights) - sum(end[1] for end in known)) / len(known)
    for (x, y, name, colour), height in zip(known, heights, strict=True):
        axes.annotate(
            name, (x, y), xytext=(1.02, height - shift), textcoords=("axes fraction", "data"), ha="left", va="center",
            fontsize=8.5, arrowprops={"arrowstyle": "-", "color": colour, "linewidth": 0.8, "shrinkA": 1, "shrinkB": 1},
        )  # fmt: skip


def _residuals(axes: Axes, course: _Course, name: str, curve: Floats) -> None:
    _windows(axes, course, named=False)
    colour, dash = _look(name)
    axes.plot(curve[:, 0], 0 * curve[:, 0], color=colour, linestyle=dash, zorder=1.5)
    _data(axes, course.t, _less_mm(course.t, course.value, curve), MM * course.u, course.flags)
    ends = []
    for other, line_of in course.models.items():
        if other != name:
            off = np.column_stack([line_of[:, 0], _less_mm(line_of[:, 0], line_of[:, 1], curve)])
            ends.append(_model_line(axes, other, off))
    axes.set_ylabel(f"measured\n− {'fit' if name.startswith('quadratic') else name} / mm")
    _name_ends(axes, ends)


def _less_mm(t: Floats, value: Floats, curve: Floats) -> Floats:
    """Values less a curve [mm]; NaN outside the times that the curve covers."""
    known = curve[np.isfinite(curve).all(axis=1)]
    known = known[np.argsort(known[:, 0])]
    if not len(known):
        return np.full(len(t), np.nan)
    return np.asarray(MM * (value - np.interp(t, known[:, 0], known[:, 1], left=np.nan, right=np.nan)), dtype=float)


def _path(result: Result) -> Plot | None:
    payout = result.kind == "payout"
    what = "apex" if payout else "end"
    x, z = _numbers(result.frames, f"{what}_x_m"), _numbers(result.frames, f"{what}_z_m")
    both = np.isfinite(x) & np.isfinite(z)
    if both.sum() < 2:
        return None
    flags = np.array([bool(flag_text(cell)) for cell in result.frames["flags"]])
    figure = Figure(figsize=SIZE_IN, layout="constrained")
    axes = figure.subplots()
    plain, odd = both & ~flags, both & flags
    axes.plot(1000 * x, np.where(both, z, np.nan), color="#767676", linewidth=0.6)
    axes.plot(1000 * x[plain], z[plain], ".", color=ROLES["measured"], markersize=3.2)
    axes.plot(1000 * x[odd], z[odd], "o", color=ROLES["excluded"], fillstyle="none", markersize=4.5)
    first, last = np.flatnonzero(both)[[0, -1]]
    for i, word in ((first, "first"), (last, "last")):
        axes.annotate(
            f"{word}, frame {int(result.frames['frame'].iloc[i])}", (1000 * x[i], z[i]), xytext=(22, 13), textcoords="offset points",
            va="center", fontsize=8.5, arrowprops={"arrowstyle": "-", "linewidth": 0.6, "shrinkA": 0, "shrinkB": 2},
        )  # fmt: skip
    across, along = np.ptp(x[both]), np.ptp(z[both])
    half = max(500 * across * 1.6, 1.0)
    centre = 500 * (x[both].max() + x[both].min())
    axes.set_xlim(centre - half, centre + half)
    axes.set_xlabel("place to the right of the datum x / mm")
    axes.set_ylabel("height above the datum z / m")
    thing = "apex" if payout else "end"
    finding = f"The {thing} moved over {1000 * across:.0f} mm sideways and {along:.2f} m in height"
    _title(figure, finding)
    alt = f"{finding}. Path in the plane of motion, the two axes to different scales; {_count(both, both & flags)}."
    return _finish(figure, "path", finding, alt)


def _budget(result: Result) -> Plot | None:
    for name, quantity in result.quantities.items():  # the headline stands first
        if quantity.budget and quantity.u > 0:
            return _bars(name, quantity)
        return None
    return None


def _bars(name: str, quantity: Quantity) -> Plot:
    lines = [line for line in quantity.budget if line.part != 0][:MOST_BARS]
    rest = [line for line in quantity.budget if line.part != 0][MOST_BARS:]
    labels = [f"{_wrapped(line.source)}\n({line.kind}, {line.shared})" for line in lines]
    sizes = [abs(line.part) for line in lines]
    texts = [f"{part_text(abs(line.part), quantity.unit)}, {percent(line, quantity.u)}" for line in lines]
    shared = [line.shared != "run" for line in lines]
    if rest:
        together = float(np.sqrt(sum(line.part**2 for line in rest)))
        labels, sizes, shared = [*labels, f"{len(rest)} smaller ones"], [*sizes, together], [*shared, False]
        texts.append(part_text(together, quantity.unit))
    figure = Figure(figsize=(SIZE_IN[0], 1.3 + 0.42 * len(sizes)), layout="constrained")
    axes = figure.subplots()
    places = np.arange(len(sizes))
    bars = axes.barh(places, sizes, height=0.62, color=ROLES["law"], edgecolor=ROLES["law"])
    for bar, common in zip(bars, shared, strict=True):
        if common:
            bar.set(facecolor="white", hatch="////")
    for place, size, text in zip(places, sizes, texts, strict=True):
        axes.annotate(text, (size, place), xytext=(4, 0), textcoords="offset points", va="center", fontsize=8.5)
    axes.set_yticks(places, labels)
    axes.tick_params(axis="y", length=0)
    axes.invert_yaxis()
    axes.set_xlim(0, 1.45 * max(sizes))
    axes.locator_params(axis="x", nbins=5)
    unit = show_unit(quantity.unit)
    axes.set_xlabel("part of the standard uncertainty |c u|" + (f" / {unit}" if unit else ""))
    largest = lines[0]
    source = largest.source[0].upper() + largest.source[1:]
    finding = f"{source} makes {percent(largest, quantity.u)} of the variance of the {name_of(name).label}"
    _title(figure, finding)
    alt = f"{finding}. Bars, largest first: " + "; ".join(
        f"{label.replace(chr(10), ' ')} {text}" for label, text in zip(labels, texts, strict=True)
    )
    return _finish(figure, "budget", finding, alt + ". Hatched: shared with other runs.")


def _wrapped(text: str) -> str:
    return "\n".join(textwrap.wrap(text, 26)) or text


def _title(figure: Figure, finding: str) -> None:
    # A number is not parted from its unit.
    kept = re.sub(r"(?<=[\d=±]) (?=\S)|(?<=k) (?==)", "\u00a0", finding)
    figure.suptitle(textwrap.fill(kept, 50), x=0.012, ha="left", fontsize=10.5, fontweight="bold")


def _told(course: _Course, finding: str, base: tuple[str, Floats] | None) -> str:
    """The plot in words."""
    shown = np.isfinite(course.value)
    t, value = course.t[shown], course.value[shown]
    unit = show_unit(course.unit)
    what = course.words
    parts = [
        f"{finding}. {what[0].upper()}{what[1:]} from {value[0]:.3g} {unit} at {t[0]:.3f} s to {value[-1]:.3g} {unit} at {t[-1]:.3f} s",
        f"between {value.min():.3g} and {value.max():.3g} {unit}",
        _count(shown, shown & course.flags),
    ]
    parts += [f"window of {name} from {low:.3f} s to {high:.3f} s" for name, (low, high) in course.windows.items()]
    if course.models:
        parts.append("curves: " + ", ".join(course.models))
    if base is not None:
        off = _less_mm(course.t, course.value, base[1])[~course.flags]
        off = off[np.isfinite(off)]
        size = f", {off.min():.1f} to {off.max():.1f} mm where nothing is flagged" if len(off) else ""
        parts.append(f"below, measured minus {base[0]}{size}")
    return "; ".join(parts) + "."


def _count(shown: NDArray[np.bool_], flagged: NDArray[np.bool_]) -> str:
    text = f"{int(shown.sum())} of {len(shown)} frames measured"
    return text + (f", {int(flagged.sum())} flagged and drawn hollow" if flagged.any() else "")


def _span(course: _Course) -> str:
    """A finding where no quantity was drawn from the course."""
    what = course.words.rsplit(" ", 1)[0]
    low, high = np.nanmin(course.value), np.nanmax(course.value)
    return f"{what[0].upper()}{what[1:]} between {low:.2f} and {high:.2f} {show_unit(course.unit)}".replace("-", "−")


def _finish(figure: Figure, stem: str, finding: str, alt: str) -> Plot:
    svg, png = io.StringIO(), io.BytesIO()
    figure.savefig(svg, format="svg", metadata={"Date": None, "Creator": None})
    figure.set_layout_engine("none")  # laid out once: it takes as long as drawing
    figure.savefig(png, format="png", dpi=PNG_DPI, metadata={"Software": None})
    return Plot(stem, finding, alt, _open_font(svg.getvalue()), png.getvalue())


def _open_font(svg: str) -> str:
    # Where the drawing machine's font is absent, one of the same widths.
    return svg.replace("'DejaVu Sans'", "'DejaVu Sans', Verdana, sans-serif")
