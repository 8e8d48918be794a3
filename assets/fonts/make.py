"""Makes the fonts that Planimeter ships from the full ones (for whoever updates them; needs fonttools).

    python assets/fonts/make.py FOLDER_WITH_NOTO_AND_JETBRAINS_MONO

Each face is cut to Latin, Greek, punctuation, arrows and the signs of the algebra, so that an exported drawing can carry
it; and the advance widths are written to advances.json, so that texts are measured without a screen.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

from fontTools import subset
from fontTools.ttLib import TTFont

HERE = Path(__file__).parent
FACES = {
    "serif": "NotoSerif-Regular.ttf",
    "serif-bold": "NotoSerif-Bold.ttf",
    "serif-italic": "NotoSerif-Italic.ttf",
    "sans": "NotoSans-Regular.ttf",
    "sans-bold": "NotoSans-Bold.ttf",
    "mono": "JetBrainsMono-Regular.ttf",
    "math": "NotoSansMath-Regular.ttf",
}
RANGES = ["U+0020-007E", "U+00A0-017F", "U+0370-03FF", "U+2010-2027", "U+2030-205E", "U+2070-209C", "U+2190-21FF"]
RANGES += ["U+2200-22FF", "U+2460-2473", "U+25A0-25FF", "U+27D5-27D7", "U+2A1D"]


FAMILIES = {
    "serif": "Planimeter Serif",
    "sans": "Planimeter Sans",
    "mono": "Planimeter Mono",
    "math": "Planimeter Signs",
}
STYLES = {"bold": "Bold", "italic": "Italic", "": "Regular"}


def rename(font: TTFont, face: str) -> None:
    """Gives the cut face a family of its own, so that a full font of the old name on the machine is not taken for it."""
    stem, _, style = face.partition("-")
    family, kind = FAMILIES[stem], STYLES[style]
    names = font["name"]
    for record in list(names.names):
        if record.nameID in (1, 2, 3, 4, 6, 16, 17, 21, 22, 25):
            names.removeNames(nameID=record.nameID)
    for number, text in (
        (1, family),
        (2, kind),
        (3, f"{family} {kind}"),
        (4, f"{family} {kind}"),
        (6, f"{family}-{kind}".replace(" ", "")),
    ):
        names.setName(text, number, 3, 1, 0x409)


def main(folder: Path) -> None:
    advances = {}
    for face, name in FACES.items():
        source = next(folder.rglob(name))
        target = HERE / f"{face}.ttf"
        options = ["--layout-features=", "--no-hinting", "--notdef-outline", f"--output-file={target}"]
        subset.main([str(source), f"--unicodes={','.join(RANGES)}", *options])
        font = TTFont(target)
        rename(font, face)
        font.save(target)
        widths = font["hmtx"].metrics
        advances[face] = {
            "em": font["head"].unitsPerEm,
            "ascent": font["hhea"].ascent,
            "descent": -font["hhea"].descent,
            "widths": {chr(code): widths[glyph][0] for code, glyph in sorted(font.getBestCmap().items())},
        }
    text = json.dumps(advances, ensure_ascii=False, separators=(",", ":"), sort_keys=True)
    (HERE / "advances.json").write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
