"""Glyphs: characters drawn in many font faces, grouped by font family.

Letters that look alike in two alphabets are drawn from one of them only.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError

SIDE = 20
FONT_SIZE = 14
BASELINE = 15

CHARACTERS = (
    "".join(map(chr, range(0x21, 0x7F)))
    + "".join(chr(code) for code in range(0xC0, 0x100) if code not in (0xD7, 0xF7))
    + "αβγδεζηθικλμνξοπρστυφχψω" + "ΓΔΘΛΞΠΣΦΨΩ"
    + "бвгджзийклмнптфцчшщъыьэюя" + "БДЖИЛФЦЧШ"
)

# Folder below FONTS_FOLDER and the Debian package that fills it.
FONTS_FOLDER = Path("/usr/share/fonts")
FONT_PACKAGES = {
    "opentype/inter": "fonts-inter",
    "opentype/urw-base35": "fonts-urw-base35",
    "opentype/linux-libertine": "fonts-linuxlibertine",
    "opentype/stix": "fonts-stix",
    "truetype/anonymous-pro": "fonts-anonymous-pro",
    "truetype/cmu": "fonts-cmu",
    "truetype/dejavu": "fonts-dejavu-core fonts-dejavu-extra",
    "truetype/freefont": "fonts-freefont-ttf",
    "truetype/gentiumplus": "fonts-sil-gentiumplus",
    "truetype/jetbrains-mono": "fonts-jetbrains-mono",
    "truetype/lato": "fonts-lato",
    "truetype/liberation2": "fonts-liberation2",
    "truetype/open-sans": "fonts-open-sans",
    "truetype/roboto": "fonts-roboto-unhinted",
    "truetype/vollkorn": "fonts-vollkorn",
    "fonts-go": "fonts-go",
}

# Families of one design under several names.
KIN = {
    "Anonymous Pro Minus": "Anonymous Pro", "CMU Serif Extra": "CMU Serif", "CMU Serif Upright Italic": "CMU Serif",
    "CMU Classical Serif": "CMU Serif", "CMU Sans Serif Demi Condensed": "CMU Sans Serif",
    "CMU Typewriter Text Variable Width": "CMU Typewriter Text", "FreeMono": "Nimbus Mono PS",
    "FreeSans": "Nimbus Sans", "FreeSerif": "Nimbus Roman", "Gentium Book Plus": "Gentium Plus",
    "Go Medium": "Go", "Inter Display": "Inter", "Linux Libertine Display O": "Linux Libertine O",
    "Nimbus Sans Narrow": "Nimbus Sans", "Open Sans Condensed": "Open Sans", "Roboto Condensed": "Roboto",
    "STIX Math": "STIX", "STIXGeneral": "STIX",
}
# Faces whose letters are small capitals, keys, ornaments or symbols.
ODD_FAMILIES = ("D050000L", "Go Smallcaps", "Linux Biolinum Keyboard O", "Linux Libertine Initials O",
                "Standard Symbols PS")
NO_CHARACTER = "\U0010fffe"


@dataclass(frozen=True)
class Glyphs:
    """Drawn characters.

    Attributes
    ----------
    X : ndarray of shape (n, 400), uint8
        Ink of each pixel, row by row.
    y : ndarray of shape (n,), text
        The character.
    families : ndarray of shape (n,), text
        Font family.
    image_shape : (int, int)
    """

    X: np.ndarray
    y: np.ndarray
    families: np.ndarray
    image_shape: tuple = (SIDE, SIDE)


def draw_glyphs():
    """Draw every character of `CHARACTERS` once in every font face that has it.

    Returns
    -------
    Glyphs

    Raises
    ------
    InputError
        If Pillow or a font package is missing.
    """
    try:
        from PIL import Image, ImageDraw, ImageFont
    except ImportError:
        raise InputError("glyphs", "needs the Python package pillow", "no such package here",
                         'install it with: pip install "hyperforecast[workshop]"') from None
    missing = [package for folder, package in FONT_PACKAGES.items() if not (FONTS_FOLDER / folder).is_dir()]
    if missing:
        raise InputError("glyphs", "needs Debian's font packages", f"none of {', '.join(missing)}",
                         f"install them with: apt-get install {' '.join(missing)}")
    images, labels, families = [], [], []
    paths = sorted(path for folder in FONT_PACKAGES for path in (FONTS_FOLDER / folder).rglob("*.[ot]tf"))
    for path in paths:
        font = ImageFont.truetype(path, FONT_SIZE, layout_engine=ImageFont.Layout.BASIC)
        family = font.getname()[0]
        if family in ODD_FAMILIES:
            continue
        absent = bytes(font.getmask(NO_CHARACTER))
        drawn = []
        for character in CHARACTERS:
            mask = bytes(font.getmask(character))
            if any(mask) and mask != absent:
                canvas = Image.new("L", (SIDE, SIDE))
                ImageDraw.Draw(canvas).text((SIDE // 2, BASELINE), character, fill=255, font=font, anchor="ms")
                drawn.append((character, np.asarray(canvas).ravel()))
        if {character for character, _ in drawn}.issuperset(CHARACTERS[:94]):
            labels += [character for character, _ in drawn]
            images += [image for _, image in drawn]
            families += [KIN.get(family, family)] * len(drawn)
    return Glyphs(np.array(images), np.array(labels), np.array(families))
