"""CSV and JSON as other programs read them."""

import csv
import dataclasses
import io
import json
import math
from fractions import Fraction
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tracker.analysis.quantity import BudgetLine, quantity
from tracker.report.demo import Demo, demo
from tracker.report.plain import as_json, plain
from tracker.report.stored import read_result
from tracker.report.tables import document, frames_csv, result_json, safe_text, summary_csv, summary_row
from tracker.result import FRAME_COLUMNS, Result


@pytest.fixture(scope="module")
def made() -> Demo:
    return demo("payout", frames=60, size=(180, 320))


def strict(text: str) -> dict[str, object]:
    """Parse as JSON that knows no NaN (RFC 8259)."""

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is not JSON")

    parsed = json.loads(text, parse_constant=refuse)
    assert isinstance(parsed, dict)
    return parsed


def test_frames_csv_comes_back_the_same_through_pandas(made: Demo) -> None:
    back = pd.read_csv(io.StringIO(frames_csv(made.result)))
    assert tuple(back.columns) == FRAME_COLUMNS
    for name in FRAME_COLUMNS[:-1]:
        np.testing.assert_array_equal(back[name].to_numpy(float), made.result.frames[name].to_numpy(float), err_msg=name)
    assert back["flags"].fillna("").tolist() == made.result.frames["flags"].tolist()


def test_frames_csv_keeps_to_rfc_4180(made: Demo) -> None:
    text = frames_csv(made.result)
    assert text.count("\r\n") == len(made.result.frames) + 1 and text.endswith("\r\n")
    assert "\n" not in text.replace("\r\n", "") and "\r" not in text.replace("\r\n", "")
    assert {len(row) for row in csv.reader(io.StringIO(text, newline=""))} == {len(FRAME_COLUMNS)}
    assert "nan" not in text.lower()


def test_a_column_that_nobody_filled_is_empty_and_flags_may_be_a_list(made: Demo) -> None:
    table = made.result.frames.drop(columns=["end_x_m"]).assign(flags=[["blurred", "clipped"]] * len(made.result.frames))
    rows = list(csv.DictReader(io.StringIO(frames_csv(dataclasses.replace(made.result, frames=table)))))
    assert {row["end_x_m"] for row in rows} == {""}
    assert rows[0]["flags"] == "blurred clipped"


def named(made: Demo, **test: str) -> Result:
    return dataclasses.replace(made.result, sheet={**made.result.sheet, "test": {"kind": "payout", **test}})


# The characters are those of OWASP's page on CSV injection and of ASVS 1.2.10 (read).
@pytest.mark.parametrize("attack", ["=1+1", "+SUM(A1)", "-2+3", "@cmd", "\tx", "\rx", "\nx", "\0x", "＝1", "-inf", "-1_0", "+1,2"])
def test_formulas_are_defused_and_the_row_stays_whole(made: Demo, attack: str) -> None:
    assert safe_text(attack) == "'" + attack
    rows = list(csv.reader(io.StringIO(summary_csv(named(made, batch=attack)), newline="")))
    assert len(rows) == 2 and len(rows[0]) == len(rows[1])
    assert rows[1][0].startswith("'")


@pytest.mark.parametrize("harmless", ["B-0412", "07", "-1.2", "+3", "-4e-3", "", "a=b", 'say "hi", twice\r\nthen go', "Prüfling 7"])
def test_other_text_and_plain_numbers_are_left_alone(made: Demo, harmless: str) -> None:
    assert safe_text(harmless) == harmless
    assert next(csv.DictReader(io.StringIO(summary_csv(named(made, specimen=harmless)), newline="")))["specimen"] == harmless


def test_numbers_in_the_summary_stay_numbers_at_full_precision(made: Demo) -> None:
    arc = dataclasses.replace(made.result.quantities["arc_height_m"], value=-1 / 3)
    result = dataclasses.replace(made.result, quantities={**made.result.quantities, "arc_height_m": arc})
    back = pd.read_csv(io.StringIO(summary_csv(result)))
    assert float(back["arc_height_m"].iloc[0]) == -1 / 3
    assert float(back["U95_arc_height_m"].iloc[0]) == arc.U


def test_rows_of_one_kind_stack_whatever_was_measured(made: Demo) -> None:
    full = summary_row(made.result)
    bare = summary_row(dataclasses.replace(made.result, quantities={}))
    assert list(full) == list(bare)
    assert len({name.lower() for name in full}) == len(full)  # spreadsheets do not tell u_ from U_
    assert bare["arc_height_m"] is None


def test_result_json_is_strict_and_holds_the_contract(made: Demo, tmp_path: Path) -> None:
    content = strict(result_json(made.result, tmp_path / "out"))
    arc = content["results"]["arc_height_m"]  # type: ignore[index]
    assert {"value", "unit", "u", "U", "k", "dof", "interval", "u_run", "window_s", "definition", "budget"} <= set(arc)
    assert {"source", "id", "u", "c", "kind", "dof", "shared"} <= set(arc["budget"][0])
    assert arc["drift_mps"] == 0.004
    assert {"code", "says", "damage", "remedy"} == set(content["warnings"][0])  # type: ignore[index]
    assert content["inputs"]["clip"]["sha256"] == made.result.clip_sha256  # type: ignore[index]


def test_extras_never_overwrite_the_contract(made: Demo, tmp_path: Path) -> None:
    arc = dataclasses.replace(made.result.quantities["arc_height_m"], extra={"value": "wrong", "at_z_m": np.float64(-1.0)})
    content = document(dataclasses.replace(made.result, quantities={"arc_height_m": arc}), tmp_path)
    assert content["results"]["arc_height_m"]["value"] == arc.value
    assert content["results"]["arc_height_m"]["at_z_m"] == -1.0


def test_what_is_not_finite_becomes_null_and_infinite_dof_comes_back(made: Demo, tmp_path: Path) -> None:
    odd = quantity(math.nan, "m", [BudgetLine("x", math.inf, 1.0)], "")
    result = dataclasses.replace(made.result, quantities={"arc_height_m": odd, **dict(list(made.result.quantities.items())[1:])})
    (tmp_path / "result.json").write_text(result_json(result, tmp_path), encoding="utf-8")
    strict((tmp_path / "result.json").read_text(encoding="utf-8"))
    back = read_result(tmp_path)
    assert math.isnan(back.quantities["arc_height_m"].value)
    assert back.quantities["length_paid_out_m"].dof == math.inf


def test_a_stored_result_comes_back_equal(made: Demo, tmp_path: Path) -> None:
    (tmp_path / "result.json").write_text(result_json(made.result, tmp_path), encoding="utf-8")
    back = read_result(tmp_path)
    assert back.quantities == made.result.quantities
    assert back.predictions == made.result.predictions
    assert back.warnings == made.result.warnings
    assert (back.kind, back.batch, back.specimen) == ("payout", "B-0412", "07")
    assert back.clip_path.resolve() == made.result.clip_path.absolute()


def test_plain_takes_what_the_rooms_hand_over() -> None:
    assert plain({"a": np.arange(2), 3: (np.float32(0.5), np.bool_(True)), "f": Fraction(1, 240), "p": Path("a/b")}) == {
        "a": [0, 1], "3": [0.5, True], "f": "1/240", "p": "a/b",
    }  # fmt: skip
    with pytest.raises(TypeError, match="object"):
        plain(object())
    assert as_json({"u": math.inf}) == '{\n  "u": null\n}\n'
