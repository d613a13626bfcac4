"""Remake the README's pictures from the sample clips: ``python -m tests.pictures``."""

import shutil
import sys
import tempfile
from pathlib import Path

import av

from tracker.measure import measure_run
from tracker.report.folder import write_folder

ROOT = Path(__file__).parents[1]
RUN = "payout-cable"
MOMENT = 0.75  # of the clip


def main() -> int:
    """Write docs/pictures/overlay.png and arc-height.png."""
    pictures = ROOT / "docs" / "pictures"
    pictures.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as name:
        measured = measure_run(ROOT / "sample_clips" / RUN / "run.toml")
        folder = write_folder(measured.result, Path(name) / "results", frames=measured.frames, sample=measured.sample)
        shutil.copyfile(folder / "plots" / "arc-height.png", pictures / "arc-height.png")
        with av.open(str(folder / "overlay.mp4")) as overlay:
            frames = list(overlay.decode(video=0))
            picture = frames[int(MOMENT * len(frames))].to_image()
        picture.reduce(2).save(pictures / "overlay.png", optimize=True)
    print("Wrote docs/pictures/overlay.png and docs/pictures/arc-height.png.")
    return 0


if __name__ == "__main__":
    sys.exit(main())
