"""A tiny free-drop clip made in a second, for tests of the command line: a dark ball falls beside a board.

The picture is drawn straight from geometry (no lens, camera square to the wall, 1 mm a pixel), so truth is known.
"""

from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path

import av
import numpy as np
from numpy.typing import NDArray

G = 9.8123
PX_PER_M = 1000.0
FPS = 240
BALL_M = 0.024


@dataclass(frozen=True)
class TinyDrop:
    """What is drawn."""

    width: int = 320
    height: int = 480
    frames: int = 60
    release_frame: float = 12.0
    start_px: tuple[float, float] = (60.0, 40.0)
    square_px: int = 20
    board_px: tuple[int, int] | None = (120, 120)  # upper left inner corner; None: no board
    noise: float = 1.0
    ball: bool = True
    acceleration: float = G
    seed: int = 7
    scale: float = field(default=PX_PER_M)

    def centre(self, frame: float) -> tuple[float, float]:
        """Centre of the ball in `frame` [px]."""
        t = max(0.0, (frame - self.release_frame) / FPS)
        return self.start_px[0], self.start_px[1] + 0.5 * self.acceleration * t * t * self.scale

    def picture(self, frame: int) -> NDArray[np.uint8]:
        """One grey frame, the ball blurred over a tenth of the frame period."""
        rows, columns = np.mgrid[0 : self.height, 0 : self.width].astype(float)
        picture = 150.0 + 10.0 * np.sin(columns / 37.0) + 8.0 * np.cos(rows / 53.0)
        if self.board_px is not None:
            self._board(picture, rows, columns)
        if self.ball:
            radius = BALL_M / 2 * self.scale
            cover = np.zeros_like(picture)
            offsets = np.linspace(-0.05, 0.05, 5)
            for offset in offsets:
                x, y = self.centre(frame + offset)
                cover += np.clip(radius - np.hypot(columns - x, rows - y) + 0.5, 0, 1) / len(offsets)
            picture += cover * (40.0 - picture)
        picture += np.random.default_rng((self.seed, frame)).normal(0, self.noise, picture.shape)
        return np.clip(np.rint(picture), 0, 255).astype(np.uint8)

    def _board(self, picture: NDArray[np.float64], rows: NDArray[np.float64], columns: NDArray[np.float64]) -> None:
        assert self.board_px is not None
        # inner corner (0, 0) of the 6 by 9 board lies on the corner of four pixels
        across, down = (columns - self.board_px[0] + 0.5) / self.square_px, (rows - self.board_px[1] + 0.5) / self.square_px
        paper = (across > -1.5) & (across < 6.5) & (down > -1.5) & (down < 9.5)
        inside = (across > -1) & (across < 6) & (down > -1) & (down < 9)
        dark = (np.floor(across) + np.floor(down)) % 2 == 0
        picture[paper] = 230.0
        picture[inside & dark] = 25.0


def write_clip(path: Path, pictures: list[NDArray[np.uint8]], fps: int = FPS, codec: str = "libx264") -> Path:
    """Write grey pictures as a clip with true-rate stamps."""
    with av.open(str(path), "w") as container:
        stream = container.add_stream(codec, rate=fps)
        stream.height, stream.width = pictures[0].shape
        stream.pix_fmt = "yuv420p"
        stream.codec_context.options = {"crf": "12", "preset": "ultrafast"}
        stream.codec_context.time_base = Fraction(1, fps)
        for number, picture in enumerate(pictures):
            frame = av.VideoFrame.from_ndarray(picture, format="gray").reformat(format="yuv420p")
            frame.pts, frame.time_base = number, Fraction(1, fps)
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    return path


def sheet_text(drop: TinyDrop, clip: str = "drop.mp4", **changes: str) -> str:
    """The run sheet of a tiny drop; `changes` replace or add whole lines by key: ``capture_fps="clock.capture_fps = 30"``."""
    lines = {
        "file": f'[clip]\nfile = "{clip}"',
        "capture_fps": f"[clock]\ncapture_fps = {FPS}.0",
        "readout_s": "readout_s = 0.0",
        "square_m": f"[board]\nsquare_m = {drop.square_px / drop.scale}",
        "u_square_m": "u_square_m = 0.00002",
        "distance_m": "[camera]\ndistance_m = 1.0",
        "origin_px": f"[datum]\norigin_px = [{drop.start_px[0]}, {drop.start_px[1]}]",
        "end_mark_m": f"[line]\nend_mark_m = {BALL_M}",
        "kind": '[test]\nkind = "free-drop"\nbatch = "B-1"\nspecimen = "1"',
        "gravity_mps2": f"[site]\ngravity_mps2 = {G}",
    }
    for key, line in changes.items():
        if key in lines and lines[key].startswith("["):
            line = lines[key].split("\n")[0] + "\n" + line
        lines[key] = line
    return "\n".join(lines.values()) + "\n"
