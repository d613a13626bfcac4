"""Whole runs of changed clips and contradictory sheets: right, refused, or warned, never confidently wrong.

The full table: ``python -m tests.studies.variants``. Here are its most telling rows; skipped where the shared clips are absent.
"""

import pytest

from tests.footage import clips
from tests.studies.variants import VARIANTS, Variant, Verdict, judge


def verdict_of(clip: str, name: str, folder) -> Verdict:
    clips(clip)
    (variant,) = [v for v in VARIANTS if v.clip == clip and v.name == name]
    return judge(variant, folder)


@pytest.mark.parametrize(
    ("clip", "name", "code"),
    [
        ("drop", "three frames lost in the fall", "frames-lost"),
        ("surface", "two pictures repeated", "pictures-repeated"),
    ],
)
def test_faults_that_stamps_do_not_show_are_said(clip, name, code, tmp_path):
    verdict = verdict_of(clip, name, tmp_path)
    assert code in verdict.codes
    (notice,) = [w for w in verdict.result.warnings if w.code == code]
    assert "frame " in notice.says and " s)" in notice.says  # which, and when
    assert "ms" in notice.damage and notice.remedy


def test_a_repeated_picture_is_left_out_and_flagged(tmp_path):
    verdict = verdict_of("surface", "two pictures repeated", tmp_path)
    stale = verdict.result.frames.set_index("frame").loc[[35, 50]]
    assert stale["flags"].str.contains("picture-repeated").all()
    assert stale["end_z_m"].isna().all()
    assert verdict.outcome == "right"


@pytest.mark.parametrize("clip", ["drop", "cable", "surface"])
def test_sound_pictures_are_not_accused(clip, tmp_path):
    clips(clip)
    assert not {"frames-lost", "pictures-repeated"} & set(judge(Variant("as it is", clip), tmp_path).codes)
