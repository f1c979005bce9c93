"""What a dock may ask of the workbench that holds it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from pathlib import Path

    import napari

    from leadline.model.brain import Brain
    from leadline.model.track import Track
    from leadline.pipeline.bench import Bench
    from leadline_napari.controllers.desk import Desk, Runner
    from leadline_napari.results import Results
    from leadline_napari.style import Theme
    from leadline_napari.views.canvas import Canvas


class Host(Protocol):
    """One brain in one viewer. ``desk``, ``bench`` and ``results`` are None until a brain is open and read."""

    viewer: napari.Viewer
    canvas: Canvas
    runner: Runner
    theme: Theme
    desk: Desk | None
    bench: Bench | None
    results: Results | None

    def tell(self, words: str) -> None:
        """Say something to the user."""

    def open(self, path: Path) -> None:
        """Open a brain. Raises LeadlineError when it cannot be read."""

    def take(self, brain: Brain) -> None:
        """Take a brain whose files were written anew, and read what they hold."""

    def run(self, until: str) -> None:
        """Run the pipeline up to a stage."""

    def retrack(self, track: Track) -> None:
        """Take a track that has just been redrawn; the tables follow at the next run."""

    def choose(self, penetration: str, channel: int, shank: int | None = None) -> None:
        """Take a channel in hand, everywhere."""

    def bring(self, name: str) -> None:
        """Bring a dock to the front."""
