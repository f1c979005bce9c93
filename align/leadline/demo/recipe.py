"""What kind of invented brain to make: a seed and every knob of difficulty."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from leadline.base.errors import LeadlineError
from leadline.model.frames import orientation

STACK_FORMATS = ("ome-zarr-0.4", "ome-zarr-0.5", "ome-tiff", "tiff-folder", "nifti", "nrrd")
ATLAS_FORMATS = ("nrrd", "nifti", "tiff")


@dataclass(frozen=True, slots=True)
class Recipe:
    """An invented brain: the same recipe gives the same bytes.

    Atlas and stack: ``voxel_um`` and ``stack_code`` follow the stored axes; ``one_file`` puts background and dye
    into one two-channel file (OME-Zarr and OME-TIFF only).

    Deformation: ``tilt_deg`` rotation, ``warp_um`` largest smooth displacement (knots 1.6 and 2.4 mm), ``fine_um``
    largest displacement of a finer part (knots 0.8-1.0 mm), ``dent_um`` tissue pushed along each track.

    Image: ``noise``, ``shading``, ``stripes`` are 1 for a usual sample. ``torn`` : pieces of tissue missing;
    ``bubbles``, ``vessels`` : how many; ``pools`` : dye on the surface and in the meninges; ``gaps`` : interruptions
    of the dye per shank; ``faint`` : how far it pales toward its end (0 to 1); ``crosstalk`` : share of the dye that
    shows in the background.

    Tracks: ``bend_um`` bow of a track; ``dye_end_sd_um`` dye end against the tip; ``law_sd_um, scale_sd, slope_sd``
    offset, scale and local stretch of in-vivo tip distance against track depth; ``border_sd_um`` how far the
    animal's own borders lie from the atlas's.

    Physiology: ``seconds`` of recording; ``rough`` 0 (kind) to 1 (gradients inside structures, weak landmarks,
    injured cortex, dead and noisy channels, drift, sparse sorting, heavy tails); ``silent`` names a penetration whose
    recording says nothing of the structures.
    """

    seed: int = 1
    atlas_voxel_um: float = 50.0
    atlas_code: str = "PIR"
    atlas_format: str = "nrrd"
    stack_format: str = "ome-zarr-0.5"
    stack_code: str = "IAR"
    voxel_um: tuple[float, float, float] = (32.0, 25.0, 25.0)
    one_file: bool = False
    tilt_deg: float = 8.0
    warp_um: float = 300.0
    fine_um: float = 0.0
    dent_um: float = 0.0
    noise: float = 1.0
    shading: float = 1.0
    stripes: float = 1.0
    torn: int = 0
    bubbles: int = 3
    vessels: int = 6
    pools: bool = True
    gaps: int = 1
    faint: float = 0.3
    crosstalk: float = 0.03
    bend_um: float = 80.0
    dye_end_sd_um: float = 40.0
    law_sd_um: float = 100.0
    scale_sd: float = 0.055
    slope_sd: float = 0.065
    border_sd_um: float = 0.0
    seconds: float = 64.0
    rough: float = 0.0
    silent: str = ""
    penetrations: int = 3
    n_points: int = 20000

    def __post_init__(self) -> None:
        orientation(self.stack_code)
        orientation(self.atlas_code)
        for name, value, known in (
            ("stack_format", self.stack_format, STACK_FORMATS),
            ("atlas_format", self.atlas_format, ATLAS_FORMATS),
        ):
            if value not in known:
                raise LeadlineError(f"{name} is {value!r}", where="recipe", mend=f"Known are {', '.join(known)}")
        if self.one_file and not self.stack_format.startswith("ome"):
            raise LeadlineError("one_file needs an OME format", where="recipe", mend="Choose ome-zarr-0.5 or ome-tiff")


def hard(recipe: Recipe) -> Recipe:
    """The same brain, badly treated: strong tilt, torn tissue, more bubbles, vessels, gaps and shading."""
    return replace(
        recipe,
        tilt_deg=20.0,
        noise=1.8,
        shading=1.8,
        stripes=2.0,
        torn=2,
        bubbles=8,
        vessels=14,
        gaps=2,
        faint=0.8,
        crosstalk=0.06,
    )


def fine(recipe: Recipe) -> Recipe:
    """The same brain with deformation finer than registration likes, and a dent along every track."""
    return replace(recipe, fine_um=90.0, dent_um=70.0)


def rough(recipe: Recipe) -> Recipe:
    """The same brain, recorded as real ones are."""
    return replace(
        fine(recipe),
        rough=1.0,
        border_sd_um=35.0,
        silent="C",
        stripes=2.0,
        law_sd_um=120.0,
        slope_sd=0.08,
        dye_end_sd_um=60.0,
    )


def small(recipe: Recipe, **changes: Any) -> Recipe:
    """A brain that is written in a second or two: coarse atlas and stack, few points, short recordings."""
    coarse: dict[str, Any] = {"atlas_voxel_um": 100.0, "voxel_um": (80.0, 70.0, 75.0), "n_points": 2000, "seconds": 4.0}
    return replace(recipe, **{**coarse, **changes})
