"""core: text on a picture, in the font that comes with Pillow; its missing \u00b5 and \u00b2 are put together here."""

from functools import lru_cache

from PIL import ImageDraw, ImageFont

__all__ = ["Lettering"]

Colour = tuple[int, int, int]
_SIZE = 13


@lru_cache(maxsize=16)
def _font(size: int) -> "ImageFont.FreeTypeFont | ImageFont.ImageFont":
    return ImageFont.load_default(size)


class Lettering:
    """Puts words on a drawing. ink : the colour unless another is given."""

    def __init__(self, draw: ImageDraw.ImageDraw, ink: Colour) -> None:
        self._draw, self._ink = draw, ink

    def width(self, words: str, size: int = _SIZE) -> float:
        """Pixels across."""
        return sum(_font(part_size).getlength(part) for part, part_size, _ in _parts(words, size))

    def put(
        self, x: float, y: float, words: str, *, size: int = _SIZE, across: float = 0.0, down: float = 0.0,
        colour: Colour | None = None, halo: Colour | None = None, bold: bool = False,
    ) -> None:  # fmt: skip
        """Write `words` with the point (x, y) at the share `across` of their width and `down` of their height.

        halo : a rim that sets them off from what they lie on.  bold : drawn twice, a pixel apart.
        """
        x, y = x - across * self.width(words, size), y - down * size * 1.15
        colour = colour or self._ink
        for part, part_size, kind in _parts(words, size):
            font = _font(part_size)
            for shift in (0.0, 0.7) if bold else (0.0,):
                self._draw.text(
                    (x + shift, y), part, fill=colour, font=font,
                    stroke_width=2 if halo else 0, stroke_fill=halo,
                )  # fmt: skip
            if kind == "micro":
                box = font.getbbox(part)
                stem = max(1, size // 11)
                left = x + box[0]
                self._draw.rectangle((left, y + box[1], left + stem - 1, y + box[3] + size * 0.22), fill=colour)
            x += font.getlength(part)


def _parts(words: str, size: int) -> list[tuple[str, int, str]]:
    """(text, size, kind) pieces: \u00b5 as u with a stem below the line, \u00b2 as a small raised 2."""
    parts: list[tuple[str, int, str]] = []
    for letter in words:
        if letter in "\u00b5\u00b2":
            kind = "micro" if letter == "\u00b5" else "square"
            parts.append(("u", size, kind) if kind == "micro" else ("2", round(size * 0.68), kind))
        elif parts and parts[-1][2] == "":
            parts[-1] = (parts[-1][0] + letter, size, "")
        else:
            parts.append((letter, size, ""))
    return parts
