"""Files of drawings: whole or not at all, within what readers accept, with the sheet inside."""

from __future__ import annotations

import base64
import io
import re
import zlib
from pathlib import Path

import pytest
from fontTools.ttLib import TTFont
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from PySide6.QtGui import QImage
from pytestqt.qtbot import QtBot

from app.export.files import ExportError, carried, export, to_image
from core.drawing.display import ACCENT, Circle, DisplayList, Line, Shape, Text
from core.drawing.metrics import FACES, FONTS
from core.drawing.palette import LIGHT, PRINT
from core.drawing.woff import packed

ENDINGS = (".svg", ".pdf", ".png")


def drawing(wide: float = 200.0, high: float = 100.0) -> DisplayList:
    found = DisplayList(title="Late & <early>", description="σ over ⋈")
    found.add(Shape(((0, 0), (wide, 0), (wide, high), (0, high)), "paper"))
    found.add(Line(((10, 50), (190, 50)), ACCENT, 4.0, (6.0, 2.0)), Circle(60, 20, 9, "ink", "accent"))
    found.add(Text(20, 80, "σ parcel_id ⋈ <late>", "mono", 11.5))
    return found


@pytest.mark.parametrize("ending", ENDINGS)
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    payload=st.binary(min_size=1, max_size=3000)
    | st.sampled_from([b"endstream endobj\n" * 9, b"]]></metadata>", b"\r\n\r\n"])
)
def test_any_bytes_travel_in_a_drawing(qtbot: QtBot, tmp_path: Path, ending: str, payload: bytes) -> None:
    target = tmp_path / f"x{ending}"
    export(drawing(), PRINT, target, payload)
    assert carried(target) == payload


def test_a_damaged_sheet_is_said_to_be_damaged(qtbot: QtBot, tmp_path: Path) -> None:
    svg = tmp_path / "x.svg"
    export(drawing(), PRINT, svg, b"a sheet" * 40)
    whole = svg.read_text(encoding="utf-8")
    svg.write_text(re.sub(r'(planimeter-sheet">.{20}).{8}', r"\1********", whole), encoding="utf-8")
    with pytest.raises(ExportError, match=r"x\.svg: the sheet in this drawing is damaged"):
        carried(svg)
    png = tmp_path / "x.png"
    image = to_image(drawing(), PRINT)
    image.setText("planimeter-sheet", base64.b64encode(zlib.compress(b"a sheet" * 40)[:-9]).decode())
    assert image.save(str(png))
    with pytest.raises(ExportError, match="damaged"):
        carried(png)


@pytest.mark.parametrize("ending", ENDINGS)
def test_what_is_no_drawing_carries_nothing(qtbot: QtBot, tmp_path: Path, ending: str) -> None:
    target = tmp_path / f"x{ending}"
    target.write_bytes(b"not a drawing")
    assert carried(target) is None
    with pytest.raises(FileNotFoundError):
        carried(tmp_path / f"none{ending}")


@pytest.mark.parametrize("ending", ENDINGS)
def test_where_nothing_can_be_written_an_error_says_so(qtbot: QtBot, tmp_path: Path, ending: str) -> None:
    with pytest.raises(ExportError, match="could not be written"):
        export(drawing(), PRINT, tmp_path / "no such folder" / f"x{ending}")
    with pytest.raises(ExportError, match=r"\.svg, \.pdf, \.png"):
        export(drawing(), PRINT, tmp_path / "x.gif")


def test_an_image_that_would_be_too_large_leaves_the_old_file(qtbot: QtBot, tmp_path: Path) -> None:
    target = tmp_path / "x.png"
    export(drawing(), PRINT, target)
    before = target.read_bytes()
    with pytest.raises(ExportError, match="too large"):
        export(drawing(90_000.0, 400.0), PRINT, target)
    assert target.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["x.png"]


@pytest.mark.parametrize(("wide", "high", "points"), [(200, 100, (150, 75)), (40_000, 20_000, (14_400, 7_200))])
def test_a_pdf_page_is_the_drawing(
    qtbot: QtBot, tmp_path: Path, wide: float, high: float, points: tuple[int, int]
) -> None:
    """One unit is 0.75 point; no side is longer than 14,400 points, the limit of ISO 32000-1, annex C."""
    target = tmp_path / "x.pdf"
    export(drawing(wide, high), PRINT, target)
    box = re.search(rb"/MediaBox\s*\[\s*0 0 ([\d.]+) ([\d.]+)\s*\]", target.read_bytes())
    assert box is not None
    assert (float(box[1]), float(box[2])) == pytest.approx(points, abs=1.0)


@pytest.mark.parametrize("dpi", [96, 144, 300])
def test_an_image_has_the_size_and_colours_asked_for(qtbot: QtBot, tmp_path: Path, dpi: int) -> None:
    target = tmp_path / "x.png"
    export(drawing(), LIGHT, target, dpi=dpi)
    image = QImage(str(target))
    assert (image.width(), image.height()) == (round(200 * dpi / 96), round(100 * dpi / 96))
    assert round(image.dotsPerMeterX() * 0.0254) == dpi
    assert image.text("Title") == "Late & <early>"

    def colour(x: float, y: float) -> str:
        return image.pixelColor(round(x * dpi / 96), round(y * dpi / 96)).name()

    assert colour(150, 90) == LIGHT["paper"]
    assert colour(60, 20) == LIGHT["accent"]
    assert colour(12, 50) == LIGHT["accent"]
    assert colour(17, 50) == LIGHT["paper"], "the gap of a dashed line"


@pytest.mark.parametrize("face", FACES)
def test_a_packed_font_is_the_font(face: str) -> None:
    """Read by fontTools: every table is what it was."""
    plain = (FONTS / f"{face}.ttf").read_bytes()
    short = packed(plain)
    assert len(short) < 0.7 * len(plain)
    one, other = TTFont(io.BytesIO(plain)), TTFont(io.BytesIO(short))
    assert other.flavor == "woff"
    for tag in one.keys():  # noqa: SIM118
        if tag != "GlyphOrder":
            assert one.getTableData(tag) == other.getTableData(tag), tag
