"""Developer tool: a picture of a screen, cell by cell, to look at.

    python tests/tui/picture.py FOLDER [WORD]

writes one PNG for each widget of the gallery (those whose name holds WORD), size and look. Pillow is not a dependency of
the program; it comes with matplotlib.
"""

from __future__ import annotations

import asyncio
import sys
from pathlib import Path

from golden import screen_strips
from PIL import Image, ImageDraw, ImageFont
from rich.cells import cell_len
from rich.color import ColorType
from rich.style import Style
from rich.terminal_theme import DIMMED_MONOKAI, TerminalTheme
from textual.app import App
from textual.strip import Strip

CELL = (10, 21)
_LIGHT = TerminalTheme(
    (255, 255, 255), (36, 36, 36),
    [(0, 0, 0), (170, 0, 0), (0, 120, 0), (150, 110, 0), (0, 0, 170), (150, 0, 150), (0, 130, 140), (200, 200, 200)],
    [(90, 90, 90), (255, 80, 80), (80, 200, 80), (220, 180, 0), (80, 80, 255), (255, 80, 255), (0, 180, 190), (255, 255, 255)],
)  # fmt: skip
_DARK = TerminalTheme((18, 18, 18), (208, 208, 208), DIMMED_MONOKAI.ansi_colors._colors[:8], None)


def _fonts() -> tuple[ImageFont.FreeTypeFont, ImageFont.FreeTypeFont]:
    folder = Path("/usr/share/fonts/truetype/dejavu")
    return (
        ImageFont.truetype(str(folder / "DejaVuSansMono.ttf"), 16),
        ImageFont.truetype(str(folder / "DejaVuSansMono-Bold.ttf"), 16),
    )


def _colours(style: Style | None, theme: TerminalTheme) -> tuple[tuple[int, ...], tuple[int, ...]]:
    def of(colour: object, foreground: bool) -> tuple[int, ...]:
        plain = theme.foreground_color if foreground else theme.background_color
        if colour is None or colour.type is ColorType.DEFAULT:  # type: ignore[attr-defined]
            return tuple(plain)
        return tuple(colour.get_truecolor(theme, foreground=foreground))  # type: ignore[attr-defined]

    style = style or Style()
    ink, paper = of(style.color, True), of(style.bgcolor, False)
    if style.dim:
        ink = tuple((a + b) // 2 for a, b in zip(ink, paper, strict=True))
    return (paper, ink) if style.reverse else (ink, paper)


def draw(strips: list[Strip], path: Path, *, light: bool = False) -> None:
    """Write the strips as a PNG; braille and blocks are drawn by hand, so that fonts play no part in them."""
    theme = _LIGHT if light else _DARK
    width = max(strip.cell_length for strip in strips)
    picture = Image.new("RGB", (width * CELL[0], len(strips) * CELL[1]), tuple(theme.background_color))
    pen = ImageDraw.Draw(picture)
    regular, bold = _fonts()
    for row, strip in enumerate(strips):
        x, y = 0, row * CELL[1]
        for text, style, _ in strip:
            ink, paper = _colours(style, theme)
            for character in text:
                cells = cell_len(character)
                box = (x, y, x + cells * CELL[0] - 1, y + CELL[1] - 1)
                pen.rectangle(box, fill=paper)
                if 0x2800 <= ord(character) <= 0x28FF:
                    _braille(pen, ord(character) - 0x2800, x, y, ink)
                elif 0x2581 <= ord(character) <= 0x2588:
                    top = y + CELL[1] * (8 - (ord(character) - 0x2580)) // 8
                    pen.rectangle((x, top, box[2], box[3]), fill=ink)
                elif character != " ":
                    pen.text((x, y), character, fill=ink, font=bold if style and style.bold else regular)
                x += cells * CELL[0]
    picture.save(path)


def _braille(pen: ImageDraw.ImageDraw, bits: int, x: int, y: int, ink: tuple[int, ...]) -> None:
    for row, (left, right) in enumerate(((1, 8), (2, 16), (4, 32), (64, 128))):
        for column, bit in enumerate((left, right)):
            if bits & bit:
                cx, cy = x + 1 + column * 5, y + 1 + row * 5
                pen.rectangle((cx, cy, cx + 2, cy + 2), fill=ink)


async def _photograph(app: App[object], size: tuple[int, int], path: Path, light: bool) -> None:
    async with app.run_test(size=size) as pilot:
        await pilot.pause()
        await pilot.pause()
        draw(screen_strips(app), path, light=light)


def main() -> None:
    """Photograph the gallery."""
    from gallery import GALLERY, LOOKS, GalleryApp

    folder, word = Path(sys.argv[1]), (sys.argv[2] if len(sys.argv) > 2 else "")
    folder.mkdir(parents=True, exist_ok=True)
    for name in GALLERY:
        if word not in name:
            continue
        for look_name, look in LOOKS.items():
            for size in ((80, 24), (120, 40)):
                app = GalleryApp(name, look=look)
                path = folder / f"{name}-{size[0]}x{size[1]}-{look_name}.png"
                asyncio.run(_photograph(app, size, path, look_name == "light"))


if __name__ == "__main__":
    main()
