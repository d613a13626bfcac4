"""The report page: the answer first, everything inside, readable by eye, by ear and on paper."""

import dataclasses
import math
import re
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from calibration.notice import Notice
from tracker.analysis.quantity import BudgetLine, quantity
from tracker.report.colours import contrast
from tracker.report.demo import Demo, demo
from tracker.report.overlay import still
from tracker.report.page import page
from tracker.report.plots import draw
from tracker.report.verdict import agrees, times_u, verdict
from tracker.report.wording import compact, in_words, value_in_words
from tracker.result import Prediction, Result

VOID = {"meta", "img", "br", "link", "input", "hr"}
TEMPLATE = Path(__file__).parents[3] / "tracker" / "report" / "report.html"


class Read(HTMLParser):
    """Collects tags, checks that they nest, and gathers the text."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.feed(html)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] not in ("style", "title"):
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attrs for name, attrs in self.tags if name == tag]


@pytest.fixture(scope="module")
def made() -> Demo:
    return demo("surface-drop", frames=160)


@pytest.fixture(scope="module")
def html(made: Demo) -> str:
    picture = still(made.result, "still-window", 80, "middle of the window", np.full((640, 360), 120, np.uint8))
    return page(made.result, draw(made.result), [picture], has_overlay=True)


def test_the_answer_comes_first_with_u_and_k_and_what_it_means(html: str) -> None:
    text = Read(html).text
    assert text.startswith("Run report, batch B-0412, specimen 07 drop onto a surface")
    answer = text[: text.index("What was measured")]
    for words in (
        "Effective acceleration 10.22 m/s² ± 0.14 m/s² U at 95 %, k = 2.0, taken from 0.353 s to 0.504 s",
        "The top end ran 0.409 m/s² ahead of free fall",
        "the part that has landed pulls on the part that still falls",
        "1 warning goes with this result.",
    ):
        assert words in answer
    order = ["What was measured", "Measured against laws", "Warnings", "Plots", "What makes U", "How it was filmed", "Trail",
             "Before the next run", "Measured by"]  # fmt: skip
    places = [text.index(words) for words in order]
    assert places == sorted(places)


def test_nothing_comes_from_outside(html: str) -> None:
    assert "http:" not in html and "https:" not in html and "//" not in re.sub(r"base64,[A-Za-z0-9+/=]+", "", html)
    read = Read(html)
    for tag, attrs in read.tags:
        for name in ("src", "href", "xlink:href", "data"):
            value = attrs.get(name)
            assert value is None or value.startswith(("#", "data:image/")) or value == "overlay.mp4", (tag, value)
    assert not read.all("script") and not read.all("link") and "@import" not in html and "url(#" in html
    assert set(re.findall(r"url\(([^)]{1,2})", html)) <= {"#h", "#l", "#p", "#b"}  # only into the page itself


def test_ids_are_one_of_a_kind_and_every_reference_is_met(html: str) -> None:
    read = Read(html)
    ids = [attrs["id"] for _, attrs in read.tags if attrs.get("id")]
    assert len(ids) == len(set(ids))
    asked = {value[1:] for _, attrs in read.tags if (value := attrs.get("href")) and value.startswith("#")}
    asked |= set(re.findall(r"url\(#([^)]+)\)", html))
    for name in ("aria-labelledby", "aria-describedby"):
        asked |= {attrs[name] or "" for _, attrs in read.tags if name in attrs}
    assert asked <= set(ids)


def test_it_reads_aloud(html: str) -> None:
    read = Read(html)
    assert read.all("html")[0]["lang"] == "en"
    assert all(attrs.get("scope") in ("row", "col") for attrs in read.all("th"))
    assert all(attrs.get("alt") for attrs in read.all("img"))
    assert all(attrs.get("role") == "img" and attrs.get("aria-label") for attrs in read.all("svg"))
    levels = [int(tag[1]) for tag, _ in read.tags if re.fullmatch("h[1-6]", tag)]
    assert levels[0] == 1 and all(after - before <= 1 for before, after in pairwise(levels))
    assert "−" in read.text and not re.search(r"(?<![\w.:/-])-\d", read.text.replace("written 20", ""))


def test_it_fits_a_phone_and_a_sheet_of_paper(html: str) -> None:
    assert "width=device-width" in html and "@page { size: A4" in html and "prefers-color-scheme: dark" in html
    assert not re.search(r"<svg[^>]* width=", html)  # drawings follow the page's width


def palettes() -> dict[str, dict[str, str]]:
    css = TEMPLATE.read_text(encoding="utf-8")
    light, dark = (dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", part)) for part in re.findall(r":root \{(.*?)\}", css, re.DOTALL)[:2])
    return {"light": light, "dark": dark}


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_text_has_four_and_a_half_to_one_and_graphics_three_to_one(scheme: str) -> None:
    colours = palettes()[scheme]
    for name in ("ink", "quiet", "link"):
        assert contrast(colours[name], colours["paper"]) >= 4.5, name  # WCAG 2.2, 1.4.3
    for name in ("rule", "warn", "blue"):
        assert contrast(colours[name], colours["paper"]) >= 3, name  # WCAG 2.2, 1.4.11
    for fixed in ("#d55e00", "#009e73", "#cc79a7"):  # drawn in plots in both schemes
        assert contrast(fixed, colours["paper"]) >= 3, fixed


def test_trail_cautions_and_the_limit_of_what_it_says(html: str, made: Demo) -> None:
    text = Read(html).text
    assert made.result.clip_sha256 in text
    for words in (
        "Linefall measures footage; it does not certify lifting or mooring gear.",
        "local codes and qualified staff decide", "drop zone", "bight", "eye and face protection", "Tie no line to a person",
        "capture_fps = 240.0", "datum.u_origin_px 1.5 px: a point placed by hand on the picture", "None: no point was moved by hand.",
        "u(readout) 0.0004 s",  # small u: a capital would be another quantity
        "numpy", "Measured by Checked by Date", "invented for the fictional Harrow Point line-test bench",
    ):  # fmt: skip
        assert words in text, words


def test_text_from_a_sheet_cannot_become_markup(made: Demo) -> None:
    attack = '<script>alert(1)</script>"\'&'
    sheet = {**made.result.sheet, "test": {"kind": "surface-drop", "specimen": attack}, "line": {"kind": attack}}
    budget = [BudgetLine(attack, 0.1, 1.0)]
    result = dataclasses.replace(
        made.result, sheet=sheet, clip_path=Path("a<b>.mp4"), warnings=(Notice(attack, attack, attack, attack),),
        quantities={"effective_acceleration_mps2": quantity(1.0, "m/s2", budget, attack, extra={attack: attack})},
        edits=({"who": attack},), defaults={attack: attack}, clock={attack: attack},
        predictions=(Prediction("effective_acceleration_mps2", attack, 1, 1, "m/s2", 1, 1, attack),),
    )  # fmt: skip
    read = Read(page(result, draw(result)))
    assert not read.all("script") and not read.all("b") and attack in read.text


def test_a_result_with_nothing_in_it_still_makes_a_page(made: Demo) -> None:
    bare = Result(
        kind="payout", sheet={}, sheet_path=Path("x.toml"), clip_path=Path("x.mp4"), clip_sha256="", quantities={}, predictions=(),
        warnings=(), frames=made.result.frames.iloc[:0], marks=(), clock={}, plane={}, clip={},
    )  # fmt: skip
    text = Read(page(bare, draw(bare))).text
    assert "Nothing could be measured" in text and "Warnings None." in text and "Run report, x" in text


def test_odd_numbers_are_told_and_do_not_stop_the_page(made: Demo) -> None:
    odd = quantity(math.nan, "m", [BudgetLine("x", math.inf, 1.0), BudgetLine("y", 0.0, 1.0)], "")
    guess = Prediction("effective_acceleration_mps2", "free fall", math.nan, math.nan, "m/s2", math.nan, math.nan, "Not known.")
    text = Read(page(dataclasses.replace(made.result, quantities={"arc_height_m": odd}, predictions=(guess,)))).text
    assert "not measured" in text and not re.search(r"\bnan\b", text.lower())


def against(kind: str, difference: float, law: str = "free fall") -> str:
    made = demo("surface-drop", frames=12).result
    item = Prediction("effective_acceleration_mps2", law, 9.8, 0.0, "m/s2", difference, 0.1, f"says {difference}")
    said = verdict(dataclasses.replace(made, kind=kind, predictions=(item,)))
    assert said.agrees is (abs(difference) <= 0.2) and said.finding == f"says {difference}"
    return said.meaning


def test_verdicts_say_what_agreement_and_difference_mean() -> None:
    assert "Scale and clock of this station are right together" in against("free-drop", 0.1)
    assert "lengths read too long or times too short" in against("free-drop", 0.5)
    assert "lengths read too short or times too long" in against("free-drop", -0.5)
    assert "does not pull" in against("surface-drop", 0.2) and "pulls on" in against("surface-drop", 0.3)
    assert "hands its energy on" in against("held-drop", 4.0)
    for kind in ("payout", "surface-drop", "held-drop", "edge-slide", "free-drop", "drawn"):
        for difference in (-1.0, 0.0, 1.0):
            assert against(kind, difference), (kind, difference)


def test_the_verdict_is_against_free_fall_where_there_is_one() -> None:
    made = demo("surface-drop", frames=12).result
    fold = dataclasses.replace(made.predictions[0], law="energy-conserving fold", says="other")
    assert verdict(dataclasses.replace(made, predictions=(fold, *made.predictions))).finding == made.predictions[0].says
    assert verdict(dataclasses.replace(made, predictions=(fold,))).finding == "other"
    alone = verdict(dataclasses.replace(made, predictions=()))
    assert alone.agrees is None and "No law" in alone.finding


def test_agreement_is_within_twice_the_standard_uncertainty_of_the_difference() -> None:
    item = Prediction("line_speed_mps", "law", 1.0, 0.0, "m/s", 0.2, 0.1, "")
    assert agrees(item) and not agrees(dataclasses.replace(item, difference=0.21)) and times_u(item) == "2.0"
    assert not agrees(dataclasses.replace(item, difference=math.nan))
    assert times_u(dataclasses.replace(item, u_difference=0.0)) == "not known"


@pytest.mark.parametrize(
    ("key", "value", "expected"),
    [
        ("capture_fps", 240.0, ("capture rate", "240 frames/s")),
        ("u_readout_s", 0.0004, ("u(readout)", "0.0004 s")),
        ("board.lean_deg", -0.5, ("board: lean", "−0.5°")),
        ("origin_px", [612.0, 410.5], ("origin", "612, 410.5 px")),
        ("provenance", "run sheet", ("provenance", "run sheet")),
        ("mirrored", False, ("mirrored", "no")),
        ("tag_fps", None, ("tag rate", "not given")),
        ("ticks", list(range(20)), ("ticks", "20 values, see result.json")),
    ],
)
def test_keys_and_values_read_as_words(key: str, value: object, expected: tuple[str, str]) -> None:
    assert in_words(key, value) == expected


def test_small_and_large_numbers_read_as_powers_of_ten() -> None:
    assert compact(5e-5, 2) == "5.0 × 10⁻⁵" and compact(-1234567.0) == "−1.23 × 10⁶" and compact(0.00641) == "0.00641"
    assert compact(123456.0) == "123456" and compact(math.inf) == "unlimited" and compact(math.nan) == "not known"
    assert value_in_words({"amount": 1.5, "why": "by eye"}) == "amount 1.5; why by eye"
