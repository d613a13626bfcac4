"""Budgets and their combination against worked examples of the GUM."""

import numpy as np
import pytest

from tracker.analysis.budget import Pushed, make_quantities, shrink_sentence
from tracker.analysis.quantity import BudgetLine, quantity
from tracker.analysis.tracks import Estimate


def test_gum_h1_end_gauge():
    """JCGM 100:2008 H.1.6: components 25 (18 dof), 9.7 (25.6), 2.9 (50), 16.6 nm (2): u 32 nm (31.67), dof 16."""
    lines = [
        BudgetLine(name, u, 1.0, "B", dof)
        for name, u, dof in (("l_s", 25, 18), ("d", 9.7, 25.6), ("alpha", 2.9, 50), ("theta", 16.6, 2))
    ]
    found = quantity(50000838.0, "nm", lines, "length of an end gauge at 20 C")
    assert found.u == pytest.approx(31.67, abs=0.03)
    assert int(found.dof) == 16
    assert found.k == pytest.approx(2.12, abs=0.005)  # t of 95 % for 16 degrees of freedom (JCGM 100, table G.2)
    assert found.budget[0].source == "l_s"


def test_sum_of_four_standard_normals():
    """JCGM 101:2008 9.2.2: 95 % interval +-3.92."""
    found = quantity(0.0, "1", [BudgetLine(str(i), 1.0, 1.0) for i in range(4)], "sum of four")
    assert pytest.approx(3.92, abs=0.005) == found.U


def test_own_part_is_what_a_second_run_does_not_share():
    lines = [BudgetLine("scatter", 3.0, 1.0, "A", 20), BudgetLine("board", 4.0, -1.0, shared="board", id="x")]
    found = quantity(10.0, "m", lines, "x")
    assert found.u == pytest.approx(5.0)
    assert found.u_run == pytest.approx(3.0)


def test_a_lopsided_interval_gives_its_longer_arm():
    found = quantity(1.0, "1", [BudgetLine("a", 0.1, 1.0)], "x", interval=(0.9, 1.3))
    assert pytest.approx(0.3) == found.U


def test_pushed_causes_become_signed_lines_and_one_name_is_one_line():
    estimate = {"q": Estimate(10.0, "m", 0.1, 30, None, "a length")}
    causes = [
        Pushed("offset", 0.002, "m", "station", "s", {"q": 9.8}, {"q": 10.2}),
        Pushed("corners", 1.0, "1", "station", "s", {"q": 10.3}, {"q": 9.7}),
        Pushed("corners", 1.0, "1", "station", "s", {"q": 10.4}, {"q": 9.6}),
        Pushed("one side only", 1.0, "m", "run", "", {"q": 10.05}, {}),
        Pushed("nothing", 1.0, "m", "run", "", {"q": 10.0}, {"q": 10.0}),
    ]
    found = make_quantities(estimate, causes)["q"]
    parts = {line.source: line.part for line in found.budget}
    assert parts["offset"] == pytest.approx(-0.2)
    assert parts["corners"] == pytest.approx(0.5)
    assert parts["one side only"] == pytest.approx(0.05)
    assert "nothing" not in parts
    assert found.u == pytest.approx(np.sqrt(0.04 + 0.25 + 0.0025 + 0.01))
    assert next(line for line in found.budget if line.source == "offset").c == pytest.approx(-100)


def test_what_would_shrink_u_is_a_sentence_about_filming():
    lines = [
        BudgetLine("board offset", 0.002, 2.0, shared="station"),
        BudgetLine("scatter of the frames", 0.001, 1.0, "A", 20),
    ]
    says = shrink_sentence(quantity(0.3, "m", lines, "x"))
    assert "plane of motion" in says
    assert says.endswith(".")
