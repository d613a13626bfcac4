"""The result folder: whole or not at all."""

import errno
import os
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest

from calibration.notice import BadInput, CannotMeasure
from tracker.report import folder as room
from tracker.report.demo import Demo, demo
from tracker.report.folder import write_folder
from tracker.report.plain import sha256_of
from tracker.report.plots import draw
from tracker.report.stored import read_result


@pytest.fixture(scope="module")
def made() -> Demo:
    return demo("payout", frames=24, size=(90, 160))


@pytest.fixture(autouse=True)
def no_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    """Plots are drawn only where a test looks at them: they take most of the time."""
    monkeypatch.setattr(room, "draw", lambda result: ())


def names(folder: Path) -> set[str]:
    return {path.name for path in folder.iterdir()}


def test_a_folder_holds_what_the_contract_says(made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(room, "draw", draw)
    told = []
    out = write_folder(
        made.result, tmp_path / "deep" / "run-07-results", frames=made.frames, progress=lambda *step: told.append(step)
    )
    assert names(out) == {"result.json", "summary.csv", "frames.csv", "overlay.mp4", "report.html", "plots"}
    assert {"arc-height.svg", "arc-height.png", "budget.svg", "still-window.png"} <= names(out / "plots")
    assert names(out.parent) == {"run-07-results"}
    assert ("overlay", 24, 24) in told and [step[0] for step in told if step[0] != "overlay"] == ["tables", "plots", "report"]
    stored = read_result(out)
    assert stored.quantities == made.result.quantities
    hashes = stored.document["files"]
    written = {path.relative_to(out).as_posix() for path in out.rglob("*") if path.is_file()}
    assert set(hashes) == written - {"result.json"}
    assert all(sha256_of(out / name) == value for name, value in hashes.items())


def test_an_existing_folder_is_kept(made: Demo, tmp_path: Path) -> None:
    out = write_folder(made.result, tmp_path / "r", overlay=False)
    before = (out / "result.json").read_bytes()
    with pytest.raises(BadInput, match="exists already and is kept"):
        write_folder(made.result, out, overlay=False)
    assert (out / "result.json").read_bytes() == before and names(tmp_path) == {"r"}


def test_replacing_swaps_the_whole_folder(made: Demo, tmp_path: Path) -> None:
    out = write_folder(made.result, tmp_path / "r", overlay=False)
    (out / "old-note.txt").write_text("of the old run", encoding="utf-8")
    write_folder(made.result, out, overlay=False, replace=True)
    assert "old-note.txt" not in names(out) and names(tmp_path) == {"r"}


def test_a_folder_that_holds_no_result_is_never_replaced(made: Demo, tmp_path: Path) -> None:
    (tmp_path / "holiday").mkdir()
    (tmp_path / "holiday" / "photo.jpg").write_bytes(b"dear")
    with pytest.raises(BadInput, match="holds no result of Linefall"):
        write_folder(made.result, tmp_path / "holiday", overlay=False, replace=True)
    assert (tmp_path / "holiday" / "photo.jpg").read_bytes() == b"dear"


def test_a_file_of_that_name_is_said(made: Demo, tmp_path: Path) -> None:
    (tmp_path / "r").write_text("a file", encoding="utf-8")
    for replace in (False, True):
        with pytest.raises(BadInput, match="is a file, not a folder"):
            write_folder(made.result, tmp_path / "r", overlay=False, replace=replace)


def full_disk(*_: Any, **__: Any) -> None:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


@pytest.mark.parametrize("step", ["frames_csv", "summary_csv", "result_json", "_move_into_place"])
@pytest.mark.parametrize("replace", [False, True])
def test_a_full_disk_is_one_sentence_and_leaves_all_as_it_was(
    made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str, replace: bool
) -> None:
    out = tmp_path / "r"
    if replace:
        write_folder(made.result, out, overlay=False)
    before = (out / "result.json").read_bytes() if replace else None
    monkeypatch.setattr(room, step, full_disk)
    with pytest.raises(BadInput, match=r"r: the disk is full .*Make room there"):
        write_folder(made.result, out, overlay=False, replace=replace)
    assert names(tmp_path) == ({"r"} if replace else set())
    if replace:
        assert (out / "result.json").read_bytes() == before


def test_the_old_result_comes_back_when_the_last_step_fails(
    made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = write_folder(made.result, tmp_path / "r", overlay=False)
    (out / "mine.txt").write_text("old", encoding="utf-8")
    rename, calls = room._rename, []

    def held(old: Path, new: Path) -> None:
        calls.append((old.name, new.name))
        if ".part-" in old.name:
            raise PermissionError(errno.EACCES, "held by a player")
        rename(old, new)

    monkeypatch.setattr(room, "_rename", held)
    with pytest.raises(BadInput, match=r"held by a player\. Close programs"):
        write_folder(made.result, out, overlay=False, replace=True)
    assert (out / "mine.txt").read_text(encoding="utf-8") == "old"
    assert names(tmp_path) == {"r"} and len(calls) == 3


def test_a_file_held_for_a_moment_does_not_fail_the_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "a").mkdir()
    rename, tries = Path.rename, []

    def held_twice(self: Path, target: Path) -> Path:
        tries.append(target)
        if len(tries) < 3:
            raise PermissionError(errno.EACCES, "held")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", held_twice)
    monkeypatch.setattr(room, "_HELD_PAUSE_S", 0.0)
    room._rename(tmp_path / "a", tmp_path / "b")
    assert len(tries) == 3 and (tmp_path / "b").is_dir()


@pytest.mark.parametrize("fault", [KeyboardInterrupt(), CannotMeasure("damaged at frame 3.", "Copy it again.")])
def test_a_stop_on_the_way_leaves_nothing(made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fault: BaseException) -> None:
    def stop(*_: Any) -> None:
        raise fault

    monkeypatch.setattr(room, "summary_csv", stop)
    with pytest.raises(type(fault)):
        write_folder(made.result, tmp_path / "r", overlay=False)
    assert names(tmp_path) == set()


def test_a_folder_that_is_no_result_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(BadInput, match="holds no result"):
        read_result(tmp_path)
    for text, says in [("{", "is not JSON"), ("[]", "is not a result"), ('{"format": "linefall-result", "format_version": 99}', "99")]:
        (tmp_path / "result.json").write_text(text, encoding="utf-8")
        with pytest.raises(BadInput, match=says):
            read_result(tmp_path)
    (tmp_path / "result.json").write_text('{"format": "linefall-result", "format_version": 1}', encoding="utf-8")
    with pytest.raises(BadInput, match="lacks what a result has: 'kind'"):
        read_result(tmp_path)


def test_without_overlay_stills_come_from_single_frames(made: Demo, tmp_path: Path) -> None:
    pictures, asked = dict(made.frames()), []

    def sample(numbers: list[int]) -> list[np.ndarray]:
        asked.extend(numbers)
        return [pictures[number] for number in numbers]

    out = write_folder(made.result, tmp_path / "r", frames=made.frames, sample=sample, overlay=False)
    assert "overlay.mp4" not in names(out) and "still-window.png" in names(out / "plots")
    assert asked == sorted(set(asked)) and len(asked) <= 4
    assert 'href="overlay.mp4"' not in (out / "report.html").read_text(encoding="utf-8")


def test_a_disk_that_fills_while_the_video_is_written_is_the_same_sentence(
    made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """FFmpeg's own error for a full disk is an OSError with ENOSPC too."""

    def full(*_: Any) -> None:
        raise av.error.OSError(errno.ENOSPC, "No space left on device", "overlay.mp4")

    monkeypatch.setattr(room, "write_overlay", full)
    with pytest.raises(BadInput, match="the disk is full"):
        write_folder(made.result, tmp_path / "r", frames=made.frames)
    assert names(tmp_path) == set()


def test_a_folder_above_that_cannot_be_made_is_said(made: Demo, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way", encoding="utf-8")
    with pytest.raises(BadInput, match="cannot be written"):
        write_folder(made.result, tmp_path / "file" / "r", overlay=False)


def test_the_same_result_is_the_same_to_the_byte(made: Demo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(room, "draw", draw)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1796134000")
    folders = [write_folder(made.result, tmp_path / name, frames=made.frames) for name in ("a", "b")]
    files = [{path.relative_to(out): path.read_bytes() for path in sorted(out.rglob("*")) if path.is_file()} for out in folders]
    assert files[0].keys() == files[1].keys()
    assert [name for name in files[0] if files[0][name] != files[1][name]] == []
