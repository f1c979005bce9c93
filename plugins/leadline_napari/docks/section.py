"""The Section dock, wired: what the user does in the log goes to its controller; lanes, comparison, figures."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from qtpy.QtWidgets import QFileDialog

from leadline_napari.controllers.section import SectionController
from leadline_napari.views.figures import FILTER, save_view
from leadline_napari.views.lanes import LaneDialog
from leadline_napari.views.section import SectionView

if TYPE_CHECKING:
    from leadline_napari.controllers.desk import Desk
    from leadline_napari.docks.host import Host
    from leadline_napari.states import Readout, SectionState


class SectionDock:
    """One penetration on a common depth scale."""

    def __init__(self, host: Host) -> None:
        self.host = host
        self.view = view = SectionView(host.theme)
        self.controller: SectionController | None = None
        for signal, name in (
            (view.log.double_clicked, "add_at"), (view.log.hovered, "hover"), (view.log.picked, "pick"),
            (view.nudge, "nudge"), (view.stepped, "step"), (view.deleted, "delete"), (view.accepted, "accept"),
            (view.undo_asked, "undo"), (view.redo_asked, "redo"), (view.shank_chosen, "select_shank"),
            (view.tissue_chosen, "show_tissue"), (view.anchor_chosen, "choose"), (view.anchor_changed, "change"),
            (view.dragged, "drag_to"), (view.dropped, "drop"), (view.restore_asked, "restore_suggestions"),
        ):  # fmt: skip
            signal.connect(lambda *values, name=name: self.do(name, *values))
        view.let_go.connect(lambda: self.do("choose", None))
        view.insert_asked.connect(self._insert)
        view.update_asked.connect(lambda: host.run("locate"))
        view.save_asked.connect(self._save)
        view.lanes_asked.connect(self.choose_lanes)
        view.second_asked.connect(self._choose_second)

    def begin(self, desk: Desk) -> SectionController:
        """Take a brain that has just been opened."""
        self.controller = SectionController(desk, self, self.host.runner, self.host.tell)
        self.controller._show()
        return self.controller

    def do(self, name: str, *values: object) -> None:
        """Hand on what the user did."""
        if self.controller is not None:
            getattr(self.controller, name)(*values)

    def show(self, state: SectionState) -> None:
        """Draw (called by the controller)."""
        self.view.show_state(state)

    def show_readout(self, readout: Readout | None) -> None:
        """Tell what lies under the cursor (called by the controller)."""
        self.view.show_readout(readout)

    def _insert(self) -> None:
        """The keyboard's way to an anchor: at the chosen contact, else in the middle of the probe."""
        if self.controller is None or self.controller.scene is None:
            return
        contacts = self.controller.scene.shank.contacts
        rows = np.flatnonzero(contacts.channel == self.host.desk.session.selection.channel)
        tip = contacts.tip_distance_um[rows[0]] if len(rows) else np.median(contacts.tip_distance_um)
        self.controller.add_at("tip", float(tip))

    def _choose_second(self) -> None:
        file, _ = QFileDialog.getOpenFileName(self.view, "A second reader's anchors", "", "Anchors (*.csv)")
        self.do("show_second", Path(file) if file else None)

    def choose_lanes(self) -> LaneDialog | None:
        """Open the dialog of physiology lanes."""
        controller = self.controller
        if controller is None or controller.scene is None:
            return None
        dialog = LaneDialog(self.view, controller.scene.lanes, controller.lane_names, controller.ranges)
        dialog.changed.connect(lambda names: self.do("show_lanes", names))
        dialog.ranged.connect(lambda name, low, high: self.do("set_range", name, low, high))
        dialog.open()
        return dialog

    def _save(self) -> None:
        file, _ = QFileDialog.getSaveFileName(self.view, "Save the section", "section.svg", FILTER)
        if file:
            save_view(self.view.log, Path(file))
