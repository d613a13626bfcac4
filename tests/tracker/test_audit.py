"""What `linefall clock` says of clips whose clock is known."""

import json

from tests.footage import footage
from tests.tiny import TinyDrop, write_clip
from tests.tracker.test_cli import linefall


def tiny(folder, fps):
    drop = TinyDrop(frames=24)
    return write_clip(folder / "clip.mp4", [drop.picture(i) for i in range(drop.frames)], fps=fps)


def test_true_rate_stamps_are_believed(tmp_path):
    run = linefall("clock", tiny(tmp_path, 240))
    assert run.returncode == 0
    assert "True rate: 240 frames per second" in run.stdout
    assert "[clock] capture_fps = 240" in run.stdout


def test_ordinary_stamps_without_a_tag_are_asked_for(tmp_path):
    run = linefall("clock", tiny(tmp_path, 30), "--json")
    assert run.returncode == 3
    assert json.loads(run.stdout)["clock"] is None
    assert "capture_fps" in run.stderr


def test_a_tagged_stretched_clip_is_told():
    """A phone's slow motion, stored at 30 frames a second with a tag of 240 (footage manifest)."""
    run = linefall("clock", footage("container/sample_sef_slow_motion.mp4"), "--json")
    assert run.returncode == 0, run.stderr
    assert abs(json.loads(run.stdout)["clock"]["capture_fps"] - 240) < 5


def test_no_such_clip_is_one_sentence(tmp_path):
    run = linefall("clock", tmp_path / "none.mp4")
    assert run.returncode == 2
    assert len(run.stderr.splitlines()) == 1
