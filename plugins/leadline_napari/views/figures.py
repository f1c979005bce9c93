"""What is on the screen as a figure: PNG at print resolution, SVG and PDF with text and lines as vectors."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from qtpy.QtCore import QLineF, QMarginsF, QRectF, QSize, QSizeF, Qt
from qtpy.QtGui import QColor, QFontMetricsF, QImage, QPageLayout, QPageSize, QPainter, QPdfWriter, QPen
from qtpy.QtSvg import QSvgGenerator

from leadline.base.atomic import whole_file

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from qtpy.QtWidgets import QGraphicsView

    from leadline.base.arrays import AnyArray
    from leadline_napari.style import Theme

    Paint = Callable[[QPainter], None]

FILTER = "Figures (*.png *.svg *.pdf)"
PRINT_DPI = 300
POINTS_PER_INCH = 72.0
BAR_SHARE = 0.25
FONT = re.compile(r'font-family="[^"]*"')
FONTS = "DejaVu Sans, Arial, Helvetica, sans-serif"
ROUND_UM = tuple(m * 10**e for e in range(6) for m in (1, 2, 5))


def save_view(view: QGraphicsView, path: Path) -> None:
    """Save a graphics view as it looks now, in the format that the suffix names; whole or not at all."""

    def paint(painter: QPainter) -> None:
        painter.fillRect(view.rect(), view.backgroundBrush())
        view.render(painter, QRectF(view.rect()), view.rect())

    _save(path, view.size(), view.logicalDpiX(), "Leadline section", paint)


def save_canvas(rgba: AnyArray, size: QSize, dpi: int, um_per_pixel: float, theme: Theme, path: Path) -> None:
    """Save a picture of the canvas, ``rgba`` (h, w, 4) uint8 of any resolution, over ``size`` pixels of the screen,
    with a scale bar drawn as a vector; whole or not at all."""
    height, width, _ = rgba.shape
    image = QImage(rgba.tobytes(), width, height, 4 * width, QImage.Format.Format_RGBA8888)

    def paint(painter: QPainter) -> None:
        painter.setRenderHint(QPainter.RenderHint.SmoothPixmapTransform)
        painter.drawImage(QRectF(0, 0, size.width(), size.height()), image)
        _scale_bar(painter, size, um_per_pixel, theme)

    _save(path, size, dpi, "Leadline canvas", paint)


def bar_um(width_um: float) -> float:
    """The longest round length that takes at most a quarter of a width."""
    return float(max((u for u in ROUND_UM if u <= BAR_SHARE * width_um), default=ROUND_UM[0]))


def _scale_bar(painter: QPainter, size: QSize, um_per_pixel: float, theme: Theme) -> None:
    length_um = bar_um(size.width() * um_per_pixel)
    length = length_um / um_per_pixel
    right, y = size.width() - 16.0, size.height() - 16.0
    words = f"{length_um:g} um" if length_um < 1000 else f"{length_um / 1000:g} mm"
    font = painter.font()
    font.setPixelSize(14)  # points would be counted in the resolution of the figure
    painter.setFont(font)
    paper = QColor(theme.paper)
    paper.setAlpha(170)
    wide = max(length, QFontMetricsF(font).horizontalAdvance(words))
    painter.fillRect(QRectF(right - wide - 6, y - 26, wide + 12, 32), paper)
    painter.setPen(QPen(QColor(theme.ink), 2.5))
    painter.drawLine(QLineF(right - (wide + length) / 2, y, right - (wide - length) / 2, y))
    painter.drawText(QRectF(right - wide, y - 24, wide, 20), Qt.AlignmentFlag.AlignCenter, words)


def _save(path: Path, size: QSize, dpi: int, title: str, paint: Paint) -> None:
    savers = {".png": _png, ".svg": _svg, ".pdf": _pdf}
    path = path if path.suffix.lower() in savers else path.with_suffix(".svg")
    with whole_file(path) as part:
        savers[path.suffix.lower()](part, size, dpi, title, paint)


def _png(path: Path, size: QSize, dpi: int, title: str, paint: Paint) -> None:
    scale = PRINT_DPI / dpi
    image = QImage(round(size.width() * scale), round(size.height() * scale), QImage.Format.Format_ARGB32)
    image.setDotsPerMeterX(round(PRINT_DPI / 0.0254))
    image.setDotsPerMeterY(round(PRINT_DPI / 0.0254))
    image.setDevicePixelRatio(scale)  # text and lines keep their size in the figure
    image.setText("Title", title)
    image.fill(0)
    painter = QPainter(image)
    paint(painter)
    painter.end()
    image.save(str(path), "PNG")


def _svg(path: Path, size: QSize, dpi: int, title: str, paint: Paint) -> None:
    """Without the screen's resolution Qt writes axes at another scale than what they measure; and it names fonts in
    words that only Qt knows."""
    generator = QSvgGenerator()
    generator.setFileName(str(path))
    generator.setSize(size)
    generator.setViewBox(QRectF(0, 0, size.width(), size.height()))
    generator.setResolution(dpi)
    generator.setTitle(title)
    painter = QPainter(generator)
    paint(painter)
    painter.end()
    text = path.read_text(encoding="utf-8")
    path.write_text(FONT.sub(f'font-family="{FONTS}"', text), encoding="utf-8")


def _pdf(path: Path, size: QSize, dpi: int, title: str, paint: Paint) -> None:
    writer = QPdfWriter(str(path))
    writer.setResolution(dpi)
    writer.setTitle(title)
    points = POINTS_PER_INCH / dpi
    page = QPageSize(QSizeF(size.width() * points, size.height() * points), QPageSize.Unit.Point)
    writer.setPageLayout(QPageLayout(page, QPageLayout.Orientation.Portrait, QMarginsF(0, 0, 0, 0)))
    painter = QPainter(writer)
    paint(painter)
    painter.end()
