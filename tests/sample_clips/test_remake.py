"""The committed sample clips are what the simulator makes, and the truth tables say what is in the pictures."""

import csv
import json
import shutil
import tomllib
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import av
import cv2
import numpy as np
import pytest

from sample_clips import remake
from sample_clips.benches import BENCHES, Recording
from sample_clips.remake import FOLDER, check, main, texts, write_frames
from sample_clips.render import Renderer
from sample_clips.rigs import Arcs, Ends
from sample_clips.score import score
from sample_clips.truth import COLUMNS

EVERY = pytest.mark.parametrize("name", list(BENCHES))


def read_rows(path: Path) -> dict[str, np.ndarray]:
    with path.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    return {k: np.array([float(r[k]) if r[k] else np.nan for r in rows]) for k in rows[0] if k != "flags"}


def decoded(name: str, number: int) -> np.ndarray:
    """A frame of the committed clip, upright."""
    with av.open(str(FOLDER / name / "clip.mp4")) as container:
        for index, frame in enumerate(container.decode(video=0)):
            if index == number:
                turned = np.rot90(frame.to_ndarray(format="gray"), -BENCHES[name].camera.quarter_turns)
                return turned.astype(float)
    raise AssertionError(f"{name} has no frame {number}")


# --- the committed files ----------------------------------------------------------------------------------------------


@EVERY
def test_sheet_and_truth_are_as_made_now(name):
    assert check(BENCHES[name], FOLDER, clip=False) == []


@EVERY
def test_clip_and_table_have_the_same_frames(name):
    bench, rows = BENCHES[name], read_rows(FOLDER / name / "truth.csv")
    with av.open(str(FOLDER / name / "clip.mp4")) as container:
        stream = container.streams.video[0]
        stamps = sorted(packet.pts for packet in container.demux(stream) if packet.pts is not None)
        base = stream.time_base
    assert len(stamps) == rows["frame"].size == bench.recording.frame_s.size
    ticks = np.array(stamps) - stamps[0]
    np.testing.assert_array_equal(ticks * base / bench.recording.time_base, bench.recording.ticks - bench.recording.ticks[0])


def test_clips_stay_small():
    sizes = {name: (FOLDER / name / "clip.mp4").stat().st_size for name in BENCHES}
    assert max(sizes.values()) < 3e6
    assert sum(sizes.values()) < 20e6


@pytest.mark.parametrize(("name", "number"), [("free-drop", 70), ("edge-slide", 60)])
def test_a_frame_of_the_clip_is_the_one_rendered_now(name, number):
    """Noise and compression apart: both smoothed. `python -m sample_clips --check` compares whole clips to one grey level."""
    bench = BENCHES[name]
    renderer = Renderer(bench.camera, bench.scenery, bench.motion(), bench.style, frame_s=bench.recording.frame_s, seed=bench.seed)
    now, kept = (cv2.GaussianBlur(np.asarray(f, np.float32), (0, 0), 2) for f in (renderer.frame(number), decoded(name, number)))
    difference = np.abs(now - kept)
    assert np.sqrt(np.mean(difference**2)) < 1
    assert difference.max() < 20


# --- pictures and truth agree -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "number"), [("free-drop", 80), ("surface-drop", 60), ("edge-slide", 90), ("held-drop", 60)])
def test_the_end_is_where_the_table_says(name, number):
    """The middle of what differs from the wall around the place that the truth table gives; light from the side moves it."""
    bench, rows = BENCHES[name], read_rows(FOLDER / name / "truth.csv")
    place = [rows["end_x_m"][number], 0.0, rows["end_z_m"][number]]
    column, row = bench.camera.project(place, rows["end_t_s"][number])
    half = round(1.6 * bench.end_radius_m / json.loads((FOLDER / name / "truth.json").read_text())["scale_m_per_px"]) + 2
    i, j = round(row) - half, round(column) - half
    part = decoded(name, number)[i : i + 2 * half + 1, j : j + 2 * half + 1]
    edge = np.concatenate([part[0], part[-1], part[:, 0], part[:, -1]])
    weight = np.abs(part - np.median(edge))
    weight[weight < 25] = 0
    away = np.hypot(*(np.indices(part.shape) - half))
    weight[away > 1.35 * bench.end_radius_m / 0.0009 + 1] = 0  # the line that hangs from it does not count
    rows_of, columns_of = np.indices(part.shape)
    found = [j + (weight * columns_of).sum() / weight.sum(), i + (weight * rows_of).sum() / weight.sum()]
    np.testing.assert_allclose(found, [column, row], atol=2.0)


def test_the_apex_is_where_the_table_says():
    """The topmost dark pixels of the cable above the rim, half its thickness above the axis."""
    name, number = "payout-cable", 150
    bench, rows = BENCHES[name], read_rows(FOLDER / name / "truth.csv")
    column, row = bench.camera.project([rows["apex_x_m"][number], 0, rows["apex_z_m"][number]])
    strip = decoded(name, number)[round(row) - 40 : round(row) + 15, round(column) - 3 : round(column) + 4].mean(axis=1)
    dark = np.clip(np.median(strip[:25]) - strip, 0, None)
    dark[dark < 0.2 * dark.max()] = 0
    found = (dark * np.arange(strip.size)).sum() / dark.sum() + round(row) - 40
    assert found == pytest.approx(row, abs=0.7)


# --- tables and sheets ------------------------------------------------------------------------------------------------


@EVERY
def test_tables_have_the_columns_of_frames_csv(name):
    head, first = (FOLDER / name / "truth.csv").read_text(encoding="utf-8").splitlines()[:2]
    assert tuple(head.split(",")) == COLUMNS
    assert len(first.split(",")) == len(COLUMNS)
    rows = read_rows(FOLDER / name / "truth.csv")
    assert (np.diff(rows["t_s"]) > 0).all() and rows["frame"].tolist() == list(range(rows["frame"].size))


@EVERY
def test_sheets_are_honest(name):
    """What the scene really has lies within three of the standard uncertainties that the sheet states, and is not just equal."""
    sheet = tomllib.loads((FOLDER / name / "run.toml").read_text(encoding="utf-8"))
    hidden = json.loads((FOLDER / name / "scene.json").read_text(encoding="utf-8"))["hidden"]
    board, table = hidden["board"], sheet["board"]
    assert abs(board["square_m"] - table["square_m"]) <= 3 * table["u_square_m"]
    assert abs(board["centre_m"][1] - table["offset_m"]) <= 3 * table["u_offset_m"]
    assert abs(-hidden["camera"]["position_m"][1] - sheet["camera"]["distance_m"]) <= 3 * sheet["camera"]["u_distance_m"]
    for angle in ("lean_deg", "yaw_deg"):
        if f"u_{angle}" in table:
            assert abs(board[angle] - table[angle]) <= 3 * table[f"u_{angle}"]
    place = BENCHES[name].camera.project([0, 0, 0])
    assert np.linalg.norm(place - sheet["datum"]["origin_px"]) < 0.1


def test_the_benches_differ_in_what_phones_differ_in():
    cameras = [bench.camera for bench in BENCHES.values()]
    assert {c.quarter_turns for c in cameras} == {0, 1}
    assert min(c.k1 for c in cameras) <= -0.05 and max(c.k1 for c in cameras) >= 0.045
    assert min(c.readout_s for c in cameras) < 0 < max(c.readout_s for c in cameras)
    recordings = [bench.recording for bench in BENCHES.values()]
    assert {r.codec for r in recordings} == {"h264", "hevc"} and {r.bits for r in recordings} == {8, 10}
    assert any(c.shake for c in cameras) and any(c.flicker for c in cameras)
    assert {b.kind for b in BENCHES.values()} >= {"payout", "surface-drop", "held-drop", "free-drop", "edge-slide", "drawn"}


# --- the command ------------------------------------------------------------------------------------------------------


@pytest.fixture
def short(monkeypatch):
    """The free drop cut to seven frames of a small picture."""
    bench = BENCHES["free-drop"]
    camera = replace(bench.camera, width=180, height=320, fx=355, fy=355, cx=90, cy=159)
    number = np.arange(7)
    brief = replace(bench, camera=camera, recording=Recording(number / 15, number, Fraction(1, 30), tag_fps=15.0))
    monkeypatch.setitem(remake.BENCHES, "free-drop", brief)
    return brief


def test_remade_twice_is_the_same_and_a_change_is_found(short, tmp_path, capsys):
    assert main(["free-drop", "--into", str(tmp_path)]) == 0
    assert main(["free-drop", "--into", str(tmp_path), "--check"]) == 0
    brighter = replace(short.scenery, light=replace(short.scenery.light, ambient=0.6))
    write_frames(replace(short, scenery=brighter), tmp_path / "free-drop" / "clip.mp4")
    assert main(["free-drop", "--into", str(tmp_path), "--check"]) == 1
    assert "grey levels" in capsys.readouterr().out


def test_a_changed_truth_is_found(short, tmp_path):
    for name, text in texts(short).items():
        (tmp_path / "free-drop").mkdir(exist_ok=True)
        (tmp_path / "free-drop" / name).write_text(text, encoding="utf-8")
    assert check(short, tmp_path, clip=False) == []
    table = tmp_path / "free-drop" / "truth.csv"
    head, first, *rest = table.read_text(encoding="utf-8").splitlines()
    table.write_text("\n".join([head, first.replace("0.0000000", "0.0000010", 1), *rest]) + "\n", encoding="utf-8")
    assert check(short, tmp_path, clip=False) == ["free-drop/truth.csv differs from what the simulator makes now"]


def test_an_unknown_scene_is_told(capsys):
    assert main(["free-fall"]) == 2
    assert "free-drop" in capsys.readouterr().err


# --- the scorer -------------------------------------------------------------------------------------------------------


def scored(tmp_path, name, *, change=lambda rows: None, results=None):
    """Score a result folder that holds the truth of a clip, changed."""
    (tmp_path / "frames.csv").unlink(missing_ok=True)
    shutil.copy(FOLDER / name / "truth.csv", tmp_path / "frames.csv")
    with (tmp_path / "frames.csv").open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    change(rows)
    with (tmp_path / "frames.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, COLUMNS)
        writer.writeheader()
        writer.writerows(rows)
    (tmp_path / "result.json").write_text(json.dumps({"results": results or {}}), encoding="utf-8")
    return {line.what: line for line in score(tmp_path, FOLDER / name)}


@EVERY
def test_truth_scores_perfectly(name, tmp_path):
    lines = scored(tmp_path, name)
    assert all(line.kept is not False for line in lines.values())
    if not isinstance(BENCHES[name].make().rig, Ends | Arcs):
        return
    followed = next(line for what, line in lines.items() if what.endswith("followed"))
    assert followed.says.startswith("RMS 0.000 px")


def test_a_shaky_follower_is_found_and_a_wrong_scale_is_not_its_fault(tmp_path):
    wobble = np.random.default_rng(2).normal(0, 0.0008, 400)

    def shake(rows):
        for i, row in enumerate(rows):
            if row["end_z_m"]:
                row["end_z_m"] = float(row["end_z_m"]) + wobble[i]

    def stretch(rows):
        for row in rows:
            for key in ("end_x_m", "end_z_m"):
                if row[key]:
                    row[key] = 1.004 * float(row[key]) + 0.0003

    assert scored(tmp_path, "free-drop", change=shake)["end followed"].kept is False
    lines = scored(tmp_path, "free-drop", change=stretch)
    assert lines["end followed"].kept and "scale +0.400 %" in lines["end placed"].says


def test_a_late_stamp_is_found(tmp_path):
    def late(rows):
        for i, row in enumerate(rows):
            if row["end_t_s"]:
                row["end_t_s"] = float(row["end_t_s"]) + 0.0015 * (i % 2)

    assert scored(tmp_path, "free-drop", change=late)["end followed"].kept is False


def test_headlines_are_held_in_their_own_window(tmp_path):
    truths = json.loads((FOLDER / "surface-drop" / "truth.json").read_text(encoding="utf-8"))
    right = {
        "effective_acceleration_mps2": {"value": truths["effective_acceleration_mps2"], "U": 0.01, "window_s": truths["window_s"]},
        "landing_coefficient": {"value": 0.13, "U": 0.02},
        "lead_over_free_fall_s": {
            "value": truths["lead_over_free_fall_s"]["lead"], "U": 2e-5, "at_z_m": truths["lead_over_free_fall_s"]["at_z_m"],
        },
    }  # fmt: skip
    lines = scored(tmp_path, "surface-drop", results=right)
    assert all(lines[name].kept for name in right)
    wrong = {
        "effective_acceleration_mps2": {**right["effective_acceleration_mps2"], "window_s": [0.1, 0.2]},
        "landing_coefficient": {"value": 0.13, "U": 0.02, "interval": [0.121, 0.15]},
        "lead_over_free_fall_s": {**right["lead_over_free_fall_s"], "value": 0.008},
    }
    lines = scored(tmp_path, "surface-drop", results=wrong)
    assert not any(lines[name].kept for name in wrong)


def test_a_fast_line_misread_is_found(tmp_path):
    def alias(rows):
        for row in rows[150:]:
            row["line_speed_mps"] = float(row["line_speed_mps"]) - 1.08

    assert scored(tmp_path, "payout-beads")["line speed"].kept
    assert scored(tmp_path, "payout-beads", change=alias)["line speed"].kept is False
