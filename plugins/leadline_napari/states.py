"""What the screens show: frozen snapshots, made by controllers, handed to views that only draw them.

Vertical places are in um. Left lanes are drawn in track depth; right lanes in tip distance, on the same scale, so that
the tip lies level with the end of the track. Arrays are read-only by agreement and compared by identity.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from leadline.base.arrays import AnyArray, FloatArray, IntArray
    from leadline.model.anchor import Anchor

    Colour = tuple[int, int, int]


@dataclass(frozen=True, slots=True, eq=False)
class Tissue:
    """The stack straightened along the track. ``rgb`` : (D, W, 3) uint8 rows from ``top_um`` to ``bottom_um``."""

    rgb: AnyArray
    top_um: float
    bottom_um: float
    half_width_um: float
    title: str


@dataclass(frozen=True, slots=True)
class Stratum:
    """One run of one structure along the track."""

    top_um: float
    bottom_um: float
    acronym: str
    name: str
    colour: Colour


@dataclass(frozen=True, slots=True, eq=False)
class Strata:
    """Runs from the surface down; ``border_sd_um`` : how far a border may lie from where it is drawn."""

    runs: tuple[Stratum, ...]
    border_sd_um: float


@dataclass(frozen=True, slots=True)
class Tie:
    """An anchor, as a line from its contact to its place in the strata.

    ``kind`` : 'user', 'auto', 'fixed' (brain.toml), 'suggested' or 'second' (another reader's).
    """

    anchor: Anchor
    kind: str
    label: str
    held: bool = False
    evidence: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Band:
    """The tie band: ``tip_um`` (k,) ascending and where the depth map puts them, ``depth_um`` (k,); ``stretch``
    (k - 1,) atlas um per probe um between them; ``out_of_range`` : words where it is improbable, else ''."""

    tip_um: FloatArray
    depth_um: FloatArray
    sd_um: FloatArray
    stretch: FloatArray
    ties: tuple[Tie, ...]
    out_of_range: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Sites:
    """Contacts of the shank. ``x_um``, ``tip_um`` : (n,); ``rgb`` : (n, 3) uint8 by region; ``channel`` : (n,)."""

    x_um: FloatArray
    tip_um: FloatArray
    channel: IntArray
    rgb: AnyArray
    chosen: int | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Ribbon:
    """Odds of every structure by row. ``tip_um`` : (R,) ascending; ``share`` : (R, L); ``rgb`` : (L, 3) uint8."""

    tip_um: FloatArray
    share: AnyArray
    rgb: AnyArray
    acronyms: tuple[str, ...]
    exact: bool


@dataclass(frozen=True, slots=True, eq=False)
class Lane:
    """One physiology lane. ``values`` : (R,) for a curve, (R, F) for a picture whose columns lie at ``across`` (F,).

    ``low``, ``high`` : range of values shown. ``palette`` : 'sequential', 'diverging' or 'cyclic'. ``rgba`` : the
    picture, (H, F, 4) uint8, its rows even from tip distance ``picture_um[0]`` (last row) to ``picture_um[1]`` (first).
    ``ticks`` : (place from 0 to 1 across the lane, text).
    """

    name: str
    title: str
    unit: str
    tip_um: FloatArray
    values: AnyArray
    low: float
    high: float
    across: FloatArray | None = None
    across_unit: str = ""
    across_log: bool = False
    palette: str = "sequential"
    rgba: AnyArray | None = None
    picture_um: tuple[float, float] = (0.0, 0.0)
    ticks: tuple[tuple[float, str], ...] = ()


@dataclass(frozen=True, slots=True)
class InHand:
    """The anchor or suggestion in hand. ``editable`` : not one of brain.toml, no suggestion. ``landmarks`` : names to
    choose from."""

    anchor: Anchor
    kind: str
    editable: bool
    evidence: str = ""
    landmarks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Readout:
    """What lies under the cursor, in words, and where: track depth and tip distance, NaN where there is none."""

    text: str
    depth_um: float
    tip_um: float


@dataclass(frozen=True, slots=True, eq=False)
class SectionState:
    """Everything the section dock shows of one shank. ``end_um`` : track depth level with the tip."""

    title: str = ""
    end_um: float = 0.0
    top_um: float = 0.0
    bottom_um: float = 1000.0
    tissue: Tissue | None = None
    strata: Strata | None = None
    band: Band | None = None
    sites: Sites | None = None
    ribbon: Ribbon | None = None
    lanes: tuple[Lane, ...] = ()
    in_hand: InHand | None = None
    can_undo: bool = False
    can_redo: bool = False
    shanks: tuple[tuple[str, int], ...] = ()
    shank: tuple[str, int] = ("", 0)
    message: str = ""


@dataclass(frozen=True, slots=True)
class StageState:
    """One stage of a brain: ``state`` is 'done', 'changed' (out of date), 'missing' or 'running'."""

    name: str
    title: str
    state: str
    note: str = ""


@dataclass(frozen=True, slots=True)
class PenetrationState:
    """A row of the brain dock."""

    name: str
    shanks: tuple[int, ...]
    traced: str
    recording: str
    anchors: int
    suggestions: int


@dataclass(frozen=True, slots=True)
class BrainState:
    """What the brain dock shows. ``running`` : what runs now, '' for nothing."""

    name: str = ""
    folder: str = ""
    stages: tuple[StageState, ...] = ()
    penetrations: tuple[PenetrationState, ...] = ()
    messages: tuple[str, ...] = ()
    running: str = ""
    share: float = 0.0
    selected: tuple[str, int] = ("", 0)


@dataclass(frozen=True, slots=True, eq=False)
class TableState:
    """The channel table: ``columns`` and rows of plain values; ``chosen`` : (penetration, channel) or None."""

    columns: tuple[str, ...] = ()
    rows: tuple[tuple[object, ...], ...] = ()
    colours: tuple[Colour, ...] = field(default=())
    chosen: tuple[str, int] | None = None


@dataclass(frozen=True, slots=True, eq=False)
class LayerSpec:
    """One napari layer. ``kind`` : 'image', 'labels', 'points' or 'surface'. ``options`` : what its constructor takes
    beside data and units, which are um throughout."""

    name: str
    kind: str
    data: object
    options: dict[str, object]


@dataclass(frozen=True, slots=True)
class Pose:
    """How the canvas is turned. ``order`` : axes from the one that is scrolled to the one that runs across, in 2-D;
    in 3-D they stay in the order in which they are stored. ``flat``, ``solid`` : where the three axes then lead (depth,
    vertical, horizontal). ``view``, ``up`` : directions along the stored axes from which the brain is looked at in 3-D.
    """

    order: tuple[int, int, int]
    flat: tuple[str, str, str]
    solid: tuple[str, str, str]
    view: tuple[float, float, float]
    up: tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class CorrectionState:
    """What the corrections dock shows. ``by_hand`` : the track in hand was drawn, ``entry_set`` : and its
    entry too. ``pairs`` : in words. ``in_force`` :
    pairs refine the registration from the next run on; ``same`` : they are the ones shown."""

    title: str = ""
    editing: bool = False
    by_hand: bool = False
    entry_set: bool = False
    can_edit: bool = False
    pairs: tuple[str, ...] = ()
    errors: str = ""
    in_force: bool = False
    same: bool = True
    registered: bool = False


@dataclass(frozen=True, slots=True)
class Legend:
    """What colours mean: (name, colour) of every class, or of the two ends of a range."""

    column: str
    entries: tuple[tuple[str, str], ...]
    is_range: bool = False
