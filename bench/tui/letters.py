"""Letters three rows high, for words and figures that are read from across the room.

Each glyph is drawn in five rows of pixels; two pixels share a cell by way of half blocks, so a word
takes three rows of the screen.
"""

from __future__ import annotations

from bench.tui.glyphs import Glyphs

__all__ = ["ROWS", "large", "large_width"]

ROWS = 3

_DRAWN = {
    "0": "### #.# #.# #.# ###",
    "1": ".#. ##. .#. .#. ###",
    "2": "### ..# ### #.. ###",
    "3": "### ..# .## ..# ###",
    "4": "#.# #.# ### ..# ..#",
    "5": "### #.. ### ..# ###",
    "6": "### #.. ### #.# ###",
    "7": "### ..# ..# .#. .#.",
    "8": "### #.# ### #.# ###",
    "9": "### #.# ### ..# ###",
    "A": "### #.# ### #.# #.#",
    "B": "##. #.# ##. #.# ##.",
    "C": "### #.. #.. #.. ###",
    "D": "##. #.# #.# #.# ##.",
    "E": "### #.. ##. #.. ###",
    "F": "### #.. ##. #.. #..",
    "G": "#### #... #.## #..# ####",
    "H": "#.# #.# ### #.# #.#",
    "I": "# # # # #",
    "J": "..# ..# ..# #.# ###",
    "K": "#.# #.# ##. #.# #.#",
    "L": "#.. #.. #.. #.. ###",
    "M": "#...# ##.## #.#.# #...# #...#",
    "N": "#..# ##.# #.## #..# #..#",
    "O": "### #.# #.# #.# ###",
    "P": "### #.# ### #.. #..",
    "Q": "####. #..#. #..#. #.##. #####",
    "R": "##. #.# ##. #.# #.#",
    "S": "### #.. ### ..# ###",
    "T": "### .#. .#. .#. .#.",
    "U": "#.# #.# #.# #.# ###",
    "V": "#.# #.# #.# #.# .#.",
    "W": "#...# #...# #.#.# #.#.# .#.#.",
    "X": "#.# #.# .#. #.# #.#",
    "Y": "#.# #.# .#. .#. .#.",
    "Z": "### ..# .#. #.. ###",
    "?": "### ..# .## ... .#.",
    "±": ".#. ### .#. ... ###",
    "+": "... .#. ### .#. ...",
    "-": "... ... ### ... ...",
    ".": ". . . . #",
    "(": ".# #. #. #. .#",
    ")": "#. .# .# .# #.",
    " ": ". . . . .",
    "n": "... ##. #.# #.# #.#",
    "m": "..... ####. #.#.# #.#.# #.#.#",
    "u": "... #.# #.# #.# ###",
}
_PIXELS = {letter: rows.split() for letter, rows in _DRAWN.items()}
_BLOCKS = {(False, False): " ", (True, False): "▀", (False, True): "▄", (True, True): "█"}


def _spelled(words: str) -> str:
    """``words`` in letters that are drawn; capitals stand in for small ones that are not."""
    return "".join(ch if ch in _PIXELS else ch.upper() for ch in words)


def _drawable(words: str) -> bool:
    return all(ch in _PIXELS for ch in _spelled(words))


def large_width(words: str, glyphs: Glyphs) -> int:
    """Columns that ``large`` needs."""
    if not glyphs.braille or not _drawable(words):
        return 2 * len(words) - 1 if words.isalpha() else len(words)
    return sum(len(_PIXELS[ch][0]) + 1 for ch in _spelled(words)) - 1


def large(words: str, width: int, glyphs: Glyphs, *, lower: bool = False) -> list[str]:
    """``words`` in ``ROWS`` rows; plain in the middle row where large letters do not fit.

    ``lower`` puts the half row that is left over above the letters instead of below them.
    """
    if not glyphs.braille or not _drawable(words) or large_width(words, glyphs) > width:
        shown = glyphs.text(" ".join(words) if words.isalpha() else words)
        if len(shown) > width:
            shown = glyphs.text(words)
        return ["", shown[:width], ""]
    pixels = [".".join(_PIXELS[ch][row] for ch in _spelled(words)) for row in range(5)]
    pixels.insert(0 if lower else 5, "." * len(pixels[0]))
    return [
        "".join(
            _BLOCKS[top == "#", bottom == "#"]
            for top, bottom in zip(pixels[2 * row], pixels[2 * row + 1], strict=True)
        ).rstrip()
        for row in range(ROWS)
    ]
