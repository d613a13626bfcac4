"""Text in pictures: the glyphs of one font size, drawn once and laid down fast.

The font is DejaVu Sans, which comes with Matplotlib; its digits are all of one width, so that running numbers stand still.
"""

from functools import lru_cache
from pathlib import Path

import matplotlib
import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

__all__ = ["Lettering", "lettering"]

Grey = NDArray[np.uint8]


class Lettering:
    """One font size.

    Parameters
    ----------
    size : int
        Height of the letters' em in pixels.
    """

    def __init__(self, size: int) -> None:
        path = Path(matplotlib.get_data_path()) / "fonts" / "ttf" / "DejaVuSans.ttf"
        self._font = ImageFont.truetype(str(path), size)
        ascent, descent = self._font.getmetrics()
        self.height = ascent + descent
        self._glyphs: dict[str, Grey] = {}

    def width(self, text: str) -> int:
        """How many columns a text takes."""
        return sum(self._glyph(letter).shape[1] for letter in text)

    def write(self, onto: Grey, text: str, column: int, row: int, level: int = 255) -> int:
        """Lay light text on a dark grey picture, cut off at its edges.

        Parameters
        ----------
        onto : (h, w) uint8 array
            Changed in place; the lighter of picture and text stays.
        text : str
        column, row : int
            Top left corner of the text.
        level : int
            Its grey level.

        Returns
        -------
        int
            The column after the text.
        """
        for letter in text:
            glyph = self._glyph(letter)
            high, wide = min(glyph.shape[0], onto.shape[0] - row), min(glyph.shape[1], onto.shape[1] - column)
            if wide <= 0 or high <= 0:
                break
            patch = onto[row : row + high, column : column + wide]
            ink = glyph[:high, :wide]
            np.maximum(patch, ink if level == 255 else (ink.astype(np.uint16) * level // 255).astype(np.uint8), out=patch)
            column += glyph.shape[1]
        return column

    def _glyph(self, letter: str) -> Grey:
        if letter not in self._glyphs:
            wide = max(1, round(self._font.getlength(letter)))
            picture = Image.new("L", (wide, self.height))
            ImageDraw.Draw(picture).text((0, 0), letter, fill=255, font=self._font)
            self._glyphs[letter] = np.asarray(picture, dtype=np.uint8)
        return self._glyphs[letter]


@lru_cache(maxsize=16)
def lettering(size: int) -> Lettering:
    """The lettering of a size, made once."""
    return Lettering(size)
