"""The Channels dock, wired."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline_napari.controllers.table import table_of
from leadline_napari.views.table import TableView

if TYPE_CHECKING:
    from leadline_napari.docks.host import Host


class TableDock:
    """The channel table; a row that is clicked is chosen everywhere."""

    def __init__(self, host: Host) -> None:
        self.host = host
        self.view = TableView(host.theme)
        self.view.channel_chosen.connect(host.choose)

    def show(self) -> None:
        """Show the table of the last run, and what is chosen in it."""
        host = self.host
        if host.results is not None and host.results.channels is not None and host.bench is not None:
            chosen = host.desk.session.selection
            self.view.show_state(table_of(host.results.channels, host.bench.atlas.structures, chosen))
