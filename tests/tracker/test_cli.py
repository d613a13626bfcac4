"""The installed console script, as a technician meets it: answers, and failures that help."""

import csv
import json
import os
import subprocess
import sys
import sysconfig
from pathlib import Path

import numpy as np
import pytest

from tests.tiny import FPS, G, TinyDrop, sheet_text, write_clip

SCRIPT = Path(sysconfig.get_path("scripts")) / ("linefall.exe" if os.name == "nt" else "linefall")


def linefall(*arguments: str | Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the console script; what it printed comes back as text."""
    if not SCRIPT.exists():
        pytest.skip("the console script is not installed; run: pip install -e '.[test]'")
    return subprocess.run(
        [str(SCRIPT), *map(str, arguments)],
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=300,
        env={**os.environ, "COLUMNS": "120", **environment},
        check=False,
    )


def one_sentence(run: subprocess.CompletedProcess[str], code: int, *parts: str) -> None:
    """The run ended with `code` and one plain line that holds `parts`."""
    assert run.returncode == code, run.stderr + run.stdout
    lines = [line for line in run.stderr.splitlines() if line.strip()]
    assert len(lines) == 1, run.stderr
    assert "Traceback" not in run.stderr
    for part in parts:
        assert part in lines[0], lines[0]


@pytest.fixture(scope="module")
def bench(tmp_path_factory) -> Path:
    """A folder with a tiny drop clip and its sheet."""
    folder = tmp_path_factory.mktemp("bench")
    drop = TinyDrop()
    write_clip(folder / "drop.mp4", [drop.picture(i) for i in range(drop.frames)])
    (folder / "drop.toml").write_text(sheet_text(drop), encoding="utf-8")
    return folder


@pytest.fixture(scope="module")
def measured(bench) -> Path:
    """The result folder of the tiny drop."""
    run = linefall("measure", bench / "drop.toml")
    assert run.returncode == 0, run.stderr
    return bench / "drop-results"


def test_the_answer_holds_gravity(measured):
    result = json.loads((measured / "result.json").read_text(encoding="utf-8"))
    g = result["results"]["measured_gravity_mps2"]
    assert abs(g["value"] - G) <= g["U"] < 0.05 * G
    assert g["budget"] and all({"source", "id", "u", "c", "kind", "dof", "shared"} <= set(line) for line in g["budget"])


def test_the_folder_is_whole(measured):
    names = {path.name for path in measured.iterdir()}
    assert {"result.json", "summary.csv", "frames.csv", "overlay.mp4", "report.html", "plots"} <= names
    with (measured / "frames.csv").open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == TinyDrop().frames
    truth = TinyDrop()
    seen = [(int(r["frame"]), float(r["end_z_m"])) for r in rows if r["end_z_m"]]
    assert len(seen) >= 0.95 * truth.frames
    errors = [z + (truth.centre(i)[1] - truth.start_px[1]) / truth.scale for i, z in seen]
    assert np.sqrt(np.mean(np.square(errors))) < 0.0005  # half a pixel


def test_the_screen_says_value_uncertainty_and_free_fall(bench, tmp_path):
    run = linefall("measure", bench / "drop.toml", "--no-overlay", "--out", tmp_path / "r")
    assert run.returncode == 0, run.stderr
    assert "gravity" in run.stdout
    assert "±" in run.stdout
    assert "report.html" in run.stdout
    assert not (tmp_path / "r" / "overlay.mp4").exists()


def test_results_already_there_are_kept(measured, bench):
    before = (measured / "result.json").read_bytes()
    one_sentence(linefall("measure", bench / "drop.toml"), 2, "drop-results", "--replace")
    assert (measured / "result.json").read_bytes() == before


def sheet(bench: Path, folder: Path, **changes: str) -> Path:
    """A changed sheet in a folder of its own, the clip beside it."""
    path = folder / "run.toml"
    path.write_text(sheet_text(TinyDrop(), clip=str(bench / "drop.mp4").replace("\\", "/"), **changes), encoding="utf-8")
    return path


def test_no_such_sheet(tmp_path):
    one_sentence(linefall("measure", tmp_path / "none.toml"), 2, "none.toml", "no such file")


def test_no_such_clip(tmp_path):
    (tmp_path / "run.toml").write_text(sheet_text(TinyDrop(), clip="gone.mp4"), encoding="utf-8")
    one_sentence(linefall("measure", tmp_path / "run.toml"), 2, "gone.mp4")


@pytest.mark.parametrize("content", [b"", b"this is a letter, not a film\n" * 40])
def test_not_a_video(tmp_path, content):
    (tmp_path / "drop.mp4").write_bytes(content)
    (tmp_path / "run.toml").write_text(sheet_text(TinyDrop()), encoding="utf-8")
    one_sentence(linefall("measure", tmp_path / "run.toml"), 2, "drop.mp4")


def test_sound_only(tmp_path):
    import av

    with av.open(str(tmp_path / "drop.mp4"), "w") as container:
        stream = container.add_stream("aac", rate=48000)
        frame = av.AudioFrame.from_ndarray(np.zeros((1, 4800), np.float32), format="fltp", layout="mono")
        frame.sample_rate = 48000
        container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    (tmp_path / "run.toml").write_text(sheet_text(TinyDrop()), encoding="utf-8")
    one_sentence(linefall("measure", tmp_path / "run.toml"), 2, "drop.mp4", "sound only")


def test_truncated_clip_is_refused(bench, tmp_path):
    whole = (bench / "drop.mp4").read_bytes()
    (tmp_path / "drop.mp4").write_bytes(whole[: len(whole) // 2])
    (tmp_path / "run.toml").write_text(sheet_text(TinyDrop()), encoding="utf-8")
    run = linefall("measure", tmp_path / "run.toml")
    assert run.returncode in (2, 3)
    one_sentence(run, run.returncode, "drop.mp4")


@pytest.mark.parametrize(
    ("changes", "parts"),
    [
        ({"square_m": "squre_m = 0.02"}, ["squre_m", "square_m"]),
        ({"square_m": "square_m = 20"}, ["board.square_m", "millimetres", "0.02"]),
        ({"origin_px": "origin_px = [4000.0, 40.0]"}, ["datum.origin_px", "320 x 480"]),
        ({"file": 'file = "drop.mp4"\nwindow_s = [5.0, 6.0]'}, ["clip.window_s", "true time"]),
        ({"capture_fps": "capture_fps = 24.0"}, ["clock.capture_fps", "24", "240"]),
    ],
)
def test_wrong_sheets(bench, tmp_path, changes, parts):
    if "file" in changes:
        changes = {"file": changes["file"].replace("drop.mp4", str(bench / "drop.mp4").replace("\\", "/"))}
    one_sentence(linefall("measure", sheet(bench, tmp_path, **changes)), 2, *parts)


def test_a_square_ten_times_too_large_is_noticed(bench, tmp_path):
    run = linefall("measure", sheet(bench, tmp_path, square_m="square_m = 0.2"))
    assert run.returncode in (2, 3), run.stdout
    one_sentence(run, run.returncode, "square_m")


def film(folder: Path, drop: TinyDrop, fps: int = FPS, **changes: str) -> subprocess.CompletedProcess[str]:
    """Make the clip and measure it."""
    write_clip(folder / "drop.mp4", [drop.picture(i) for i in range(drop.frames)], fps=fps)
    (folder / "run.toml").write_text(sheet_text(drop, **changes), encoding="utf-8")
    return linefall("measure", folder / "run.toml", "--no-overlay")


def test_board_not_found(tmp_path):
    one_sentence(film(tmp_path, TinyDrop(board_px=None)), 3, "drop.mp4", "board")


def test_board_too_small(tmp_path):
    one_sentence(film(tmp_path, TinyDrop(square_px=5), square_m="square_m = 0.005"), 3, "drop.mp4", "board")


def test_line_never_seen(tmp_path):
    one_sentence(film(tmp_path, TinyDrop(ball=False)), 3, "run.toml")


def test_ball_that_never_falls(tmp_path):
    one_sentence(film(tmp_path, TinyDrop(release_frame=1e9)), 3, "run.toml")


def test_capture_rate_unknown_is_asked_for(tmp_path):
    one_sentence(film(tmp_path, TinyDrop(), fps=30, capture_fps="# no capture rate"), 3, "capture_fps")


def test_picture_without_anything(tmp_path):
    drop = TinyDrop()
    black = np.zeros((drop.height, drop.width), np.uint8)
    write_clip(tmp_path / "drop.mp4", [black] * 30)
    (tmp_path / "run.toml").write_text(sheet_text(drop), encoding="utf-8")
    one_sentence(linefall("measure", tmp_path / "run.toml"), 3, "drop.mp4")


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full, which this system lacks")
def test_disk_full_is_one_sentence_and_leaves_nothing(bench, tmp_path, monkeypatch):
    from calibration.notice import BadInput
    from tracker.measure import measure_run
    from tracker.report import folder as room

    measured = measure_run(bench / "drop.toml")

    def full(*_args, **_kwargs):
        with Path("/dev/full").open("wb", buffering=0) as device:
            device.write(b"x")

    monkeypatch.setattr(room, "write_overlay", full)
    with pytest.raises(BadInput, match=r"(?i)full|space"):
        room.write_folder(measured.result, tmp_path / "r", frames=measured.frames)
    assert list(tmp_path.iterdir()) == []


def test_several_sheets_go_on_after_a_failure(bench, tmp_path):
    run = linefall("measure", tmp_path / "gone.toml", sheet(bench, tmp_path), "--out", tmp_path / "all", "--no-overlay", "-q")
    assert run.returncode == 2
    assert (tmp_path / "all" / "run-results" / "result.json").exists()
    assert "gone.toml" in run.stderr
    assert len(run.stdout.splitlines()) == 1


def test_version_and_help_teach():
    assert "linefall" in linefall("--version").stdout
    text = linefall("measure", "--help").stdout
    assert "result.json" in text
    assert "--no-overlay" in text


def test_c_locale_does_not_break_the_screen(bench, tmp_path):
    plain = {"LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"}
    run = linefall("measure", bench / "drop.toml", "--no-overlay", "--out", tmp_path / "r", **plain)
    assert run.returncode == 0, run.stderr


def test_module_runs_as_the_script_does():
    run = subprocess.run([sys.executable, "-m", "tracker.cli", "--version"], capture_output=True, text=True, check=False)
    assert run.returncode == 0
