"""Opens a brain.toml, or the folder that holds one, dropped on napari."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Callable


def get_reader(path: str | list[str]) -> Callable[[Any], list[Any]] | None:
    """The reader of a brain; None, quietly, for anything else."""
    if not isinstance(path, str):
        return None
    place = Path(path)
    file = place / "brain.toml" if place.is_dir() else place
    return _read if file.name == "brain.toml" and file.is_file() else None


def _read(path: Any) -> list[Any]:
    from leadline_napari.commands import open_brain

    return open_brain(Path(path))
