"""Plots: pinned words, real text, the same to the byte, gaps that stay gaps."""

import dataclasses
import io
import re
import xml.etree.ElementTree as ET

import numpy as np
import pytest
from PIL import Image

from tracker.report.colours import OKABE_ITO, ROLES, contrast
from tracker.report.demo import Demo, demo
from tracker.report.plots import Plot, draw

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(scope="module")
def payout() -> Demo:
    return demo("payout", frames=120)


@pytest.fixture(scope="module")
def drop() -> Demo:
    return demo("surface-drop", frames=160)


def words(plot: Plot) -> str:
    root = ET.fromstring(plot.svg)
    return " ".join("".join(text.itertext()) for text in root.iter(f"{SVG}text"))


def by_stem(made: Demo) -> dict[str, Plot]:
    return {plot.stem: plot for plot in draw(made.result)}


# Computed by the formula of WCAG 2.2; #767676 and #777777 are its own well-known cases (read), the set's figures in the
# project's table of check values.
@pytest.mark.parametrize(
    ("colour", "expected"),
    [("#767676", 4.54), ("#777777", 4.48), ("#000000", 21), ("#E69F00", 2.25), ("#56B4E9", 2.31), ("#009E73", 3.42),
     ("#F0E442", 1.32), ("#0072B2", 5.19), ("#D55E00", 3.87), ("#CC79A7", 3.06)],
)  # fmt: skip
def test_contrast_agrees_with_published_cases(colour: str, expected: float) -> None:
    assert contrast(colour, "#ffffff") == pytest.approx(expected, abs=0.005)


def test_every_line_and_marker_on_white_has_three_to_one() -> None:
    assert set(ROLES.values()) <= set(OKABE_ITO.values())
    for role in ("measured", "law", "free fall", "other model", "excluded"):
        assert contrast(ROLES[role], "#ffffff") >= 3, role  # WCAG 2.2, 1.4.11


def test_each_kind_has_its_plots(payout: Demo, drop: Demo) -> None:
    assert list(by_stem(payout)) == ["arc-height", "line-speed", "length-paid-out", "path", "budget"]
    assert list(by_stem(drop)) == ["height", "line-speed", "path", "budget"]


def test_titles_are_findings_and_axes_say_quantity_solidus_unit(payout: Demo) -> None:
    plot = by_stem(payout)["arc-height"]
    said = words(plot).replace("\u00a0", " ")
    assert plot.finding == "Arc height above the rim 0.2142 m ± 0.0047 m (k = 2.0)"
    assert "Arc height above the rim 0.2142 m ± 0.0047 m" in said
    assert "window of arc height above the rim" in said and "hollow: flagged blurred-apex" in said
    assert "arc height above the rim h / m" in said and "time after first frame t / s" in said
    assert "law" in said and "− law / mm" in said


def test_free_fall_is_named_at_its_end_and_residuals_are_from_the_law(drop: Demo) -> None:
    plot = by_stem(drop)["height"]
    assert words(plot).count("free fall") == 2  # over the course and in the residuals
    low, high = re.search(r"below, measured minus law, (\S+) to (\S+) mm where nothing is flagged", plot.alt).groups()
    # The invented scatter is 0.3 mm: over some 50 points it stays within four of it, and does not vanish.
    assert -1.2 < float(low) < -0.3 and 0.3 < float(high) < 1.2


def test_the_budget_says_who_is_to_blame(drop: Demo) -> None:
    plot = by_stem(drop)["budget"]
    assert plot.finding == "Scatter about the fit makes 54 % of the variance of the effective acceleration"
    assert "board lean (B, station) 0.031 m/s², 20 %" in plot.alt


def test_the_same_result_gives_the_same_bytes(payout: Demo) -> None:
    assert draw(payout.result) == draw(payout.result)


def test_files_carry_no_date_and_no_machine(payout: Demo) -> None:
    for plot in draw(payout.result):
        assert "dc:date" not in plot.svg and "dc:creator" not in plot.svg
        assert Image.open(io.BytesIO(plot.png)).info.keys() <= {"dpi"}


def test_a_gap_is_a_gap(payout: Demo) -> None:
    """With the middle third not measured, nothing of points or band is drawn in the middle third of the time axis."""
    frames = payout.result.frames.copy()
    t = frames["t_s"].to_numpy()
    frames.loc[(t > t[-1] / 3) & (t < 2 * t[-1] / 3), ["apex_x_m", "apex_z_m", "u_apex_z_m"]] = np.nan
    gappy = dataclasses.replace(payout.result, frames=frames, model_curves={}, quantities={})
    whole = dataclasses.replace(payout.result, model_curves={}, quantities={})
    places = {}
    for name, result in (("gappy", gappy), ("whole", whole)):
        plot = next(plot for plot in draw(result) if plot.stem == "arc-height")
        clipped = [group for group in ET.fromstring(plot.svg).iter(f"{SVG}g") if "clip-path" in group.attrib]
        points = [float(use.attrib["x"]) for group in clipped for use in group.iter(f"{SVG}use")]
        places[name] = (np.array(points) - min(points)) / (max(points) - min(points))
    middle = {name: ((place > 0.36) & (place < 0.64)).sum() for name, place in places.items()}
    assert middle["gappy"] == 0 and middle["whole"] > 20
    assert (places["gappy"] < 0.3).sum() > 20 and (places["gappy"] > 0.7).sum() > 20


def test_little_data_and_odd_values_do_not_stop_the_drawing(payout: Demo) -> None:
    nothing = payout.result.frames.copy()
    nothing.loc[:, nothing.columns[2:-1]] = np.nan
    bare = dataclasses.replace(payout.result, frames=nothing, quantities={}, model_curves={})
    assert draw(bare) == ()
    one = payout.result.frames.copy()
    one.loc[3:, "apex_z_m"] = np.nan
    assert "arc-height" in {plot.stem for plot in draw(dataclasses.replace(payout.result, frames=one, model_curves={}))}


def test_without_a_model_residuals_are_from_a_quadratic_in_the_window(drop: Demo) -> None:
    plot = next(plot for plot in draw(dataclasses.replace(drop.result, model_curves={})) if plot.stem == "height")
    assert "below, measured minus quadratic in the window" in plot.alt


def test_a_long_budget_is_cut_and_the_rest_is_summed(payout: Demo) -> None:
    arc = payout.result.quantities["arc_height_m"]
    long = dataclasses.replace(arc, budget=arc.budget * 4)
    plot = next(p for p in draw(dataclasses.replace(payout.result, quantities={"arc_height_m": long})) if p.stem == "budget")
    assert "15 smaller ones" in words(plot)
