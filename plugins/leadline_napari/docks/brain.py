"""The Brain dock, wired: runs and their progress, settings, opening."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import TYPE_CHECKING

from qtpy.QtWidgets import QFileDialog

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.model.settings import Settings
from leadline_napari.controllers.runs import RunController, save_settings, settings_of
from leadline_napari.results import Results
from leadline_napari.views.brain import BrainView
from leadline_napari.views.settings import SettingsDialog
from leadline_napari.views.work import QtProgress

if TYPE_CHECKING:
    from leadline_napari.controllers.desk import Desk
    from leadline_napari.docks.host import Host


class BrainDock:
    """Penetrations, stages and what they said, runs and their settings."""

    def __init__(self, host: Host) -> None:
        self.host = host
        self.view = BrainView(host.theme)
        self.runs: RunController | None = None
        self.progress: QtProgress | None = None
        self.view.run_asked.connect(self.run)
        self.view.cancel_asked.connect(self.cancel)
        self.view.open_asked.connect(self._choose_brain)
        self.view.settings_asked.connect(self.choose_settings)

    def begin(self, desk: Desk) -> None:
        """Take a brain that has just been opened."""
        self.runs = RunController(desk, self.view, self.host.runner, self._ended)
        self.runs.open(Results())

    def open(self, results: Results) -> None:
        """Take what has been read of it."""
        if self.runs is not None:
            self.runs.open(results)

    def tell(self, words: str) -> None:
        """Add a message."""
        if self.runs is not None:
            self.runs.tell(words)

    def run(self, until: str) -> None:
        """Run the pipeline up to a stage."""
        if self.runs is None or self.runs.running:
            return
        progress = self.progress = QtProgress(self.view)
        progress.began.connect(lambda label, total: self.view.show_progress(label, 0, total))
        progress.moved.connect(lambda done: self.view.show_progress(self.view.bar.format(), done, progress.total))
        progress.said.connect(self.runs.tell)
        self.runs.start(until, progress)

    def cancel(self) -> None:
        """Stop the run at its next step."""
        if self.progress is not None:
            self.progress.cancel()

    def _ended(self) -> None:
        if self.progress is not None:
            self.progress.finish()
            self.progress = None
        try:
            self.host.take(read_brain(self.host.desk.brain.file))
        except LeadlineError as error:
            self.host.tell(str(error))

    def _choose_brain(self) -> None:
        folder = QFileDialog.getExistingDirectory(self.view, "Open a brain: the folder that holds brain.toml")
        if folder:
            try:
                self.host.open(Path(folder))
            except LeadlineError as error:
                self.host.tell(str(error))

    def choose_settings(self) -> SettingsDialog | None:
        """Open the dialog of run settings."""
        if self.host.desk is None:
            return None
        defaults = {stage: dict(values) for stage, values in dataclasses.asdict(Settings()).items()}
        dialog = SettingsDialog(self.view, settings_of(self.host.desk.brain), defaults)
        dialog.accepted_changes.connect(self._settings_changed)
        dialog.open()
        return dialog

    def _settings_changed(self, changes: object) -> None:
        try:
            self.host.take(save_settings(self.host.desk.brain, changes))
        except LeadlineError as error:
            self.host.tell(str(error))
