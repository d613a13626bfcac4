"""A run sheet is right, or one sentence says what is wrong with it and what to write instead."""

from pathlib import Path

import pytest

from calibration.notice import BadInput
from tracker.sheet import KINDS, load_sheet, sheet_keys

GOOD = """
[clip]
file = "run-07.mp4"
[clock]
capture_fps = 240.0
[board]
square_m = 0.025
u_square_m = 0.00005
[camera]
distance_m = 2.2
[datum]
origin_px = [612.0, 410.5]
[test]
kind = "payout"
"""


def written(folder: Path, text: str, name: str = "run-07.toml") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def refusal(folder: Path, old: str, new: str) -> str:
    assert old in GOOD
    with pytest.raises(BadInput) as caught:
        load_sheet(written(folder, GOOD.replace(old, new, 1)))
    return str(caught.value)


def test_good_sheet_is_read_and_its_uncertainties_are_looked_up(tmp_path):
    file = load_sheet(written(tmp_path, GOOD))
    assert file.sheet.board.inner_corners == (9, 6)
    assert file.clip_path == (tmp_path / "run-07.mp4").resolve()
    assert file.u("board.square_m", 0.025) == 0.00005
    assert file.used_defaults == {}
    assert file.u("camera.distance_m", 2.2) == pytest.approx(0.044)  # 2 %, design section 3
    assert list(file.used_defaults) == ["camera.u_distance_m"]


@pytest.mark.parametrize(
    ("old", "new", "must_say"),
    [
        ("square_m = 0.025\n", "squre_m = 0.025\n", ["squre_m", 'Did you mean "square_m"']),
        ("u_square_m", "u_squre_m", ["u_squre_m", 'Did you mean "u_square_m"']),
        ("[camera]", "[camrea]", ["camrea", 'Did you mean "camera"']),
        ("distance_m = 2.2", "offset_m = 0.1", ["[camera] has no key", "It belongs into [board]"]),
        ("square_m = 0.025\n", "square_m = 25.0\n", ["board.square_m is 25", "millimetres", "0.025"]),
        ("distance_m = 2.2", "distance_m = 220.0", ["camera.distance_m is 220", "If centimetres were meant, write 2.2"]),
        ("distance_m = 2.2", "distance_m = nan", ["camera.distance_m is nan", "finite"]),
        ("capture_fps = 240.0", 'capture_fps = "fast"', ["clock.capture_fps is 'fast'"]),
        ("capture_fps = 240.0", "capture_fps = 240.0\nu_capture_fps = -1", ["u_capture_fps is -1", "from 0 upwards"]),
        ('kind = "payout"', 'kind = "pay-out"', ["test.kind is 'pay-out'", 'Did you mean "payout"']),
        ("origin_px = [612.0, 410.5]", "origin_frame = 3", ["datum.origin_px is missing", "upright picture"]),
        ("square_m = 0.025\n", "", ["square_m is missing"]),
        ('file = "run-07.mp4"', 'file = "run-07.mp4"\nwindow_s = [0.4, 0.4]', ["clip.window_s", "empty"]),
        ('file = "run-07.mp4"', 'file = "clips\\bench.mp4"', ["clip.file", "single quotes"]),
        ("[clip]", "[clip", ["not valid TOML"]),
        ("origin_px = [612.0, 410.5]", 'origin_px = [612.0, 410.5]\nvertical = "plumb"', ["plumb_px is missing"]),
        ("square_m = 0.025\n", 'kind = "charuco"\nsquare_m = 0.025\n', ["marker_m"]),
        ("[test]", "[test]\nbatch = 7", ["test.batch is 7"]),
    ],
)
def test_each_fault_is_one_sentence_with_file_key_value_and_remedy(tmp_path, old, new, must_say):
    says = refusal(tmp_path, old, new)
    assert "run-07.toml" in says
    assert "\n" not in says
    for part in must_say:
        assert part in says


def test_station_sheet_fills_what_the_run_sheet_leaves_out_and_the_run_sheet_wins(tmp_path):
    written(tmp_path, "[camera]\ndistance_m = 2.0\n[board]\noffset_m = 0.02\nsquare_m = 0.03\n", "bench-2.toml")
    file = load_sheet(written(tmp_path, 'station = "bench-2.toml"\n' + GOOD))
    assert file.sheet.camera.distance_m == 2.2
    assert file.sheet.board.offset_m == 0.02
    assert file.sheet.board.square_m == 0.025


def test_station_of_a_station_is_refused(tmp_path):
    written(tmp_path, 'station = "other.toml"\n', "bench-2.toml")
    with pytest.raises(BadInput, match="cannot name another station"):
        load_sheet(written(tmp_path, 'station = "bench-2.toml"\n' + GOOD))


@pytest.mark.parametrize("name", ["none.toml", "."])
def test_no_file_or_a_folder_is_said(tmp_path, name):
    with pytest.raises(BadInput, match=r"no such file|is a folder"):
        load_sheet(tmp_path / name)


def test_a_clip_given_as_the_sheet_is_said(tmp_path):
    path = tmp_path / "run-07.mp4"
    path.write_bytes(b"\x00\x00\x00\x18ftypisom\xff\xfe\xfa")
    with pytest.raises(BadInput, match="run sheet"):
        load_sheet(path)


def test_windows_line_ends_marks_and_backslashes_are_read(tmp_path):
    path = tmp_path / "run-07.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace('"run-07.mp4"', "'clips\\run-07.mp4'").replace("\n", "\r\n").encode())
    assert load_sheet(path).clip_path == (tmp_path / "clips" / "run-07.mp4").resolve()


def test_keys_of_the_contract_are_known():
    contract = {
        "clip": "file window_s", "clock": "capture_fps readout_s exposure_s",
        "board": "kind inner_corners square_m offset_m lean_deg yaw_deg file marker_m dictionary marks_m marks_px",
        "camera": "lens distance_m", "datum": "origin_px origin_frame floor_px vertical plumb_px",
        "line": "kind pitch_m mark_spacing_m end_mark_m length_m mass_per_length_kg_per_m object_diameter_m object_mass_kg",
        "test": "kind drop_height_m pile_depth_m landing_rise_m out_of_plane_m batch specimen",
        "site": "gravity_mps2 latitude_deg height_m drop_check",
    }  # fmt: skip
    wanted = {f"{table}.{key}" for table, keys in contract.items() for key in keys.split()}
    assert wanted <= set(sheet_keys())
    assert set(KINDS) == {"payout", "surface-drop", "held-drop", "edge-slide", "free-drop", "drawn"}


def test_the_manual_is_current_and_knows_every_key():
    from tracker.manual import manual

    text = (Path(__file__).parents[2] / "docs" / "run-sheet.md").read_text(encoding="utf-8")
    assert text == manual(), "run: python -m tracker.manual"
    for key in sheet_keys():
        name = key.split(".")[-1]
        assert f"`{name}" in text or f"[{name}]" in text or name == "<quantity>", key
    assert "| 3 | the footage cannot carry" in text
