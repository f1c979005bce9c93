"""A graphics view as a picture: PNG at print resolution, SVG and PDF as vectors."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QMarginsF, QRectF, QSizeF
from qtpy.QtGui import QImage, QPageLayout, QPageSize, QPainter, QPdfWriter
from qtpy.QtSvg import QSvgGenerator

from leadline.base.atomic import whole_file

if TYPE_CHECKING:
    from pathlib import Path

    from qtpy.QtGui import QPaintDevice
    from qtpy.QtWidgets import QGraphicsView

FILTER = "Figures (*.png *.svg *.pdf)"
PRINT_DPI = 300
POINTS_PER_INCH = 72.0


def save_view(view: QGraphicsView, path: Path) -> None:
    """Save a graphics view as it looks now, in the format that the suffix names; whole or not at all."""
    savers = {".png": _png, ".svg": _svg, ".pdf": _pdf}
    path = path if path.suffix.lower() in savers else path.with_suffix(".svg")
    with whole_file(path) as part:
        savers[path.suffix.lower()](view, part)


def _png(view: QGraphicsView, path: Path) -> None:
    scale = PRINT_DPI / view.logicalDpiX()
    image = QImage(round(view.width() * scale), round(view.height() * scale), QImage.Format.Format_ARGB32)
    image.setDotsPerMeterX(round(PRINT_DPI / 0.0254))
    image.setDotsPerMeterY(round(PRINT_DPI / 0.0254))
    image.setDevicePixelRatio(scale)  # text and lines keep their size in the figure
    image.fill(0)
    _paint(view, image)
    image.save(str(path), "PNG")


def _svg(view: QGraphicsView, path: Path) -> None:
    """Without the screen's resolution Qt writes axes at another scale than what they measure."""
    generator = QSvgGenerator()
    generator.setFileName(str(path))
    generator.setSize(view.size())
    generator.setViewBox(view.rect())
    generator.setResolution(view.logicalDpiX())
    generator.setTitle("Leadline section")
    _paint(view, generator)


def _pdf(view: QGraphicsView, path: Path) -> None:
    writer = QPdfWriter(str(path))
    writer.setResolution(view.logicalDpiX())
    points = POINTS_PER_INCH / view.logicalDpiX()
    size = QPageSize(QSizeF(view.width() * points, view.height() * points), QPageSize.Unit.Point)
    writer.setPageLayout(QPageLayout(size, QPageLayout.Orientation.Portrait, QMarginsF(0, 0, 0, 0)))
    _paint(view, writer)


def _paint(view: QGraphicsView, device: QPaintDevice) -> None:
    painter = QPainter(device)
    painter.fillRect(view.rect(), view.backgroundBrush())
    view.render(painter, QRectF(view.rect()), view.rect())
    painter.end()
