"""Numbers as people read them, against the worked cases of JCGM 100:2008, 7.2.6."""

import csv
import math
from decimal import Decimal
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.analysis.quantity import BudgetLine, Quantity, quantity
from tracker.report.figures import columns, line, number, part_text, percent, rounded, value_text
from tracker.report.names import COLUMNS, QUANTITIES, quantities_of
from tracker.result import FRAME_COLUMNS

REFERENCE = Path(__file__).parents[2] / "reference" / "jcgm100-rounding.csv"


def cases() -> list[dict[str, str]]:
    rows = [row for row in REFERENCE.read_text(encoding="utf-8").splitlines() if not row.startswith("#")]
    return list(csv.DictReader(rows))


@pytest.mark.parametrize("case", cases(), ids=lambda case: case["u"])
def test_rounding_agrees_with_the_guide(case: dict[str, str]) -> None:
    assert rounded(float(case["value"]), float(case["u"])) == (case["value_text"], case["u_text"])


@pytest.mark.parametrize(
    ("value", "big_u", "expected"),
    [
        (0.20851, 0.0031, ("0.2085", "0.0031")),
        (0.5, 0.0996, ("0.50", "0.10")),  # carries into a new digit: two digits, not three
        (98765.0, 1234.0, ("98800", "1200")),  # left of the point, without an exponent
        (-0.0001, 0.05, ("0.000", "0.050")),  # no minus sign before nothing
        (-1.2345, 0.05, ("-1.234", "0.050")),  # a tie on the last kept digit goes to even
        (3.0, 0.0, ("3", "")),  # a count
        (math.nan, 0.1, ("not measured", "")),
        (1.5, math.nan, ("1.5", "")),
    ],
)
def test_rounding_at_the_edges(value: float, big_u: float, expected: tuple[str, str]) -> None:
    assert rounded(value, big_u) == expected


@given(st.floats(-1e6, 1e6), st.floats(1e-9, 1e5))
def test_value_and_u_end_at_the_same_place_and_stay_near(value: float, big_u: float) -> None:
    shown, shown_u = rounded(value, big_u)
    place = Decimal(10) ** Decimal(shown_u).as_tuple().exponent
    assert abs(float(shown_u) / big_u - 1) <= 0.05 + 1e-12  # two digits: at worst 1.05 -> 1.1 or 1.0
    assert abs(Decimal(shown) - Decimal(repr(value))) <= max(place / 2, Decimal(repr(big_u)) / 10)
    if "." in shown_u:
        assert Decimal(shown).as_tuple().exponent == Decimal(shown_u).as_tuple().exponent


def one(value: float = 0.20851, u: float = 0.0015816, interval: tuple[float, float] | None = None) -> Quantity:
    return quantity(value, "m", [BudgetLine("scatter", u, 1.0)], "as it is", interval=interval)


def test_a_line_reads_as_a_sentence() -> None:
    assert line("arc_height_m", one()) == "arc height above the rim 0.2085 m ± 0.0031 m (k = 2.0)"


def test_a_pure_number_has_no_unit_and_a_square_is_written_as_one() -> None:
    pure = quantity(1.0417, "1", [BudgetLine("x", 0.0075, 1.0)], "")
    assert line("acceleration_ratio", pure) == "acceleration against local gravity 1.042 ± 0.015 (k = 2.0)"
    fall = quantity(9.8123, "m/s2", [BudgetLine("x", 0.01, 1.0)], "")
    assert value_text(fall) == "9.812 m/s² ± 0.020 m/s²"


def test_a_lopsided_interval_is_given_by_its_ends() -> None:
    lopsided = one(0.213, 0.006, interval=(0.1985, 0.2225))
    assert line("pickup_coefficient", lopsided) == "pick-up coefficient 0.2130 m, interval 0.1985 to 0.2225 m (95 %)"
    assert columns(lopsided) == ("0.2130", "0.1985 to 0.2225")


def test_what_is_not_known_is_said() -> None:
    assert line("snag_count", quantity(3, "1", [], "")) == "snags 3"
    assert line("arc_height_m", one(math.nan)) == "arc height above the rim not measured"
    assert value_text(one(0.2, math.nan)) == "0.2 m (uncertainty not known)"


def test_few_degrees_of_freedom_show_in_k() -> None:
    scatter = quantity(1.0, "m", [BudgetLine("scatter", 0.001, 1.0, "A", 2.0)], "")
    assert line("arc_height_m", scatter).endswith("(k = 4.3)")  # Student t, 2 dof, 95 %: 4.303 (JCGM 100:2008, Table G.2)


def test_budget_parts() -> None:
    of_budget = BudgetLine("board offset", 0.002, -0.13)
    assert part_text(of_budget.part, "m") == "-0.00026 m"
    assert percent(of_budget, 0.0026) == "1 %"
    assert percent(of_budget, 0.1) == "< 1 %"
    assert percent(of_budget, 0.0) == ""


def test_numbers_never_show_an_exponent() -> None:
    assert number(1.2e-7, 9) == "0.000000120"
    assert number(1.25e9, -7) == "1250000000"


def test_every_quantity_of_the_contract_and_every_column_has_words() -> None:
    contract = {
        "arc_height_m", "arc_width_m", "line_speed_mps", "effective_acceleration_mps2", "acceleration_ratio",
        "pickup_coefficient", "landing_coefficient", "lead_over_free_fall_s", "peak_end_speed_mps", "measured_gravity_mps2",
        "length_paid_out_m", "fold_coefficient", "friction_coefficient", "growth_rate_per_s", "speed_ripple", "snag_count",
        "release_s", "first_touch_s",
    }  # fmt: skip
    assert contract <= set(QUANTITIES)
    assert tuple(COLUMNS) == FRAME_COLUMNS
    for name, words in QUANTITIES.items():
        assert words.label and words.symbol and words.meaning.endswith("."), name
    assert "arc_height_m" in quantities_of("payout") and "arc_height_m" not in quantities_of("free-drop")
