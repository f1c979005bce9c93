"""The answer that follows every edit: a quick one at once, the exact one when it is ready, and never a stale one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from leadline.base.progress import Cancelled
from leadline.pipeline.exact import located, posteriors
from leadline_napari.controllers.live import Live, live_of, quick, stored
from leadline_napari.controllers.scene import Scene, make_scene

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.model.anchor import Anchor
    from leadline.pipeline.bench import Bench
    from leadline_napari.controllers.desk import Runner
    from leadline_napari.results import Results


class Stop:
    """Progress that reports to nobody and ends the work at its next step once it is asked to."""

    def __init__(self) -> None:
        self.asked = False

    def begin(self, label: str, total: float) -> None:
        """Go on, or not."""
        self.step()

    def step(self, amount: float = 1.0) -> None:
        """Raises Cancelled when nobody waits for the answer any more."""
        if self.asked:
            raise Cancelled

    def say(self, message: str) -> None:
        """Do nothing."""


@dataclass(frozen=True, slots=True, eq=False)
class Laid:
    """A shank laid out, and what the last run found for it."""

    scene: Scene
    live: Live | None


class Answers:
    """Holds the scene of one shank and the answer for it. ``changed`` is called when either arrives, ``exact`` after
    an exact answer; ``shown`` says whether a newcomer may take the screen (not while an anchor is being dragged)."""

    def __init__(self, runner: Runner, tell: Callable[[str], None]) -> None:
        self.runner, self.tell = runner, tell
        self.scene: Scene | None = None
        self.live: Live | None = None
        self.base: Live | None = None
        self.changed: Callable[[], None] = lambda: None
        self.arrived: Callable[[], None] = lambda: None
        self.busy: Callable[[], bool] = lambda: False
        self._bench: Bench | None = None
        self._stop = Stop()

    def clear(self) -> None:
        """Let go of the shank; what is being worked out for it is not waited for."""
        self._stop.asked = True
        self.scene = self.live = self.base = None

    def lay_out(
        self, bench: Bench, results: Results, key: tuple[str, int], anchors: Callable[[], tuple[Anchor, ...]]
    ) -> None:
        """Lay out a shank off the screen, then ask for its answer; ``anchors`` : those of the brain, when asked."""
        self._bench = bench
        mine = _of(anchors(), key)

        def work() -> Laid | None:
            scene = make_scene(bench, results, *key)
            return None if scene is None else Laid(scene, stored(bench, results.posteriors.get(key), scene.shank, mine))

        def done(found: object) -> None:
            assert found is None or isinstance(found, Laid)
            if found is not None:
                self.scene, self.live, self.base = found.scene, found.live, found.live
            self.changed()
            self.ask(anchors())

        self.runner.submit("scene", work, done, self.tell)

    def preview(self, anchors: tuple[Anchor, ...]) -> None:
        """Show at once what ``anchors`` of this shank would do."""
        if self.base is not None and self.scene is not None and self._bench is not None:
            self.live = quick(self.base, self._bench, self.scene.shank, anchors)

    def ask(self, anchors: tuple[Anchor, ...]) -> None:
        """Work out the exact answer under ``anchors`` of the brain; whatever was asked before is given up."""
        bench, scene = self._bench, self.scene
        if bench is None or scene is None:
            return
        self._stop.asked = True
        stop = self._stop = Stop()
        track = scene.shank.track
        mine = _of(anchors, (track.penetration, track.shank))

        def work() -> Live:
            posterior = posteriors(bench, scene.shanks, anchors, stop)[scene.index]
            return live_of(posterior, located(bench, scene.shank, posterior, mine), scene.shank, mine)

        def done(found: object) -> None:
            assert isinstance(found, Live)
            if scene is not self.scene:
                return
            self.base = found
            if not self.busy():
                self.live = found
                self.changed()
            self.arrived()

        self.runner.submit("answer", work, done, self.tell)


def _of(anchors: tuple[Anchor, ...], key: tuple[str, int]) -> tuple[Anchor, ...]:
    return tuple(a for a in anchors if (a.penetration, a.shank) == key)
