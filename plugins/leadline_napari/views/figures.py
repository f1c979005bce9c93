"""A widget as a picture: PNG at print resolution, SVG and PDF as vectors."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QMarginsF, QPoint, QSizeF
from qtpy.QtGui import QImage, QPageLayout, QPageSize, QPainter, QPdfWriter
from qtpy.QtSvg import QSvgGenerator

from leadline.base.atomic import whole_file

if TYPE_CHECKING:
    from pathlib import Path

    from qtpy.QtWidgets import QWidget

FILTER = "Figures (*.png *.svg *.pdf)"
PRINT_DPI = 300
POINTS_PER_INCH = 72.0


def save_widget(widget: QWidget, path: Path) -> None:
    """Save a widget as it looks now, in the format that the suffix names; whole or not at all."""
    savers = {".png": _png, ".svg": _svg, ".pdf": _pdf}
    path = path if path.suffix.lower() in savers else path.with_suffix(".svg")
    with whole_file(path) as part:
        savers[path.suffix.lower()](widget, part)


def _png(widget: QWidget, path: Path) -> None:
    scale = PRINT_DPI / widget.logicalDpiX()
    image = QImage(round(widget.width() * scale), round(widget.height() * scale), QImage.Format.Format_ARGB32)
    image.setDotsPerMeterX(round(PRINT_DPI / 0.0254))
    image.setDotsPerMeterY(round(PRINT_DPI / 0.0254))
    image.fill(0)
    painter = QPainter(image)
    painter.scale(scale, scale)
    widget.render(painter, QPoint())
    painter.end()
    image.save(str(path), "PNG")


def _svg(widget: QWidget, path: Path) -> None:
    """Without the screen's resolution Qt writes axes at another scale than what they measure."""
    generator = QSvgGenerator()
    generator.setFileName(str(path))
    generator.setSize(widget.size())
    generator.setViewBox(widget.rect())
    generator.setResolution(widget.logicalDpiX())
    generator.setTitle("Leadline section")
    painter = QPainter(generator)
    widget.render(painter, QPoint())
    painter.end()


def _pdf(widget: QWidget, path: Path) -> None:
    writer = QPdfWriter(str(path))
    writer.setResolution(widget.logicalDpiX())
    points = POINTS_PER_INCH / widget.logicalDpiX()
    size = QPageSize(QSizeF(widget.width() * points, widget.height() * points), QPageSize.Unit.Point)
    writer.setPageLayout(QPageLayout(size, QPageLayout.Orientation.Portrait, QMarginsF(0, 0, 0, 0)))
    painter = QPainter(writer)
    widget.render(painter, QPoint())
    painter.end()
