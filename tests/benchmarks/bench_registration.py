"""Whole-brain registration at 25 um, beside SyN with a mask and iterations on the finest grid, from the same affine.

The truth is known: invented brains with deformation down to 0.8 mm and a dent along each track; the error is that of
20,000 points of the stack carried to the atlas. Ours is the register stage as a user runs it, from files to files, the
pictures included. SyN (Avants et al. 2008, Med Image Anal 12:26; by antspyx, local cross-correlation of radius 2) gets
the stack already resampled by our affine, in memory, cut to the brain, and only the registration itself is timed. It
runs in an environment of its own, ``.venv/bench``.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from tests.benchmarks.frame import ROOT, Row, in_child, timed

VOXELS_UM = (100.0, 50.0, 25.0)  # of the stack
ATLAS_UM = 25.0
SEED = 101
SYN_PYTHON = ROOT / ".venv" / "bench" / "bin" / "python"
SYN_ITERATIONS = (40, 20, 5)  # on grids of 4, 2 and 1 voxels
SYN_METRIC, SYN_RADIUS = "CC", 2
MARGIN_UM = 500.0
WORK = "registration, whole brain"


def rows() -> Iterator[Row]:
    """Ours at three voxel sizes; SyN at the finest, where it takes an hour."""
    for voxel_um in VOXELS_UM:
        with TemporaryDirectory() as name:
            folder = Path(name)
            megavoxels = in_child(write, folder=name, voxel_um=voxel_um).answer
            ours = in_child(registered, folder=name)
            row = {"work": WORK, "size": megavoxels, "unit": "Mvoxel", "peak_mb": ours.peak_mb, "peak_bar_mb": 4000}
            said = f"{voxel_um:g} um: error {_words(ours.answer)}"
            if voxel_um > min(VOXELS_UM):
                yield Row(**row, ours=ours.cpu_s, note=said)
            elif not SYN_PYTHON.is_file():
                yield Row(**row, ours=ours.cpu_s, note=f"{said}; antspyx is not installed (make bench installs it)")
            else:
                affine = in_child(prepared, folder=name).answer
                syn = in_child(
                    syn_registered,
                    python=str(SYN_PYTHON),
                    file=str(folder / "syn.npz"),
                    iterations=SYN_ITERATIONS,
                    metric=SYN_METRIC,
                    sampling=SYN_RADIUS,
                )
                yield Row(
                    **row,
                    ours=ours.cpu_s,
                    theirs=syn.answer["cpu_s"],
                    bar=1.0,
                    reference="antspyx SyN",
                    holds=all(ours.answer[k] <= syn.answer[k] for k in ("median_um", "p95_um")),
                    note=f"{said}; SyN {_words(syn.answer)}, {syn.peak_mb:.0f} MB; affine alone {_words(affine)}",
                )


def _words(error: dict[str, float]) -> str:
    return f"{error['median_um']:.1f} um (median), {error['p95_um']:.1f} um (95th percentile)"


def write(folder: str, voxel_um: float) -> float:
    """Write the brain; returns its size in millions of voxels."""
    import numpy as np

    from leadline.demo.recipe import Recipe, fine
    from leadline.demo.write import write_brain
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.bench import Bench

    recipe = Recipe(
        SEED, atlas_voxel_um=ATLAS_UM, voxel_um=(voxel_um,) * 3, stack_code="PIR", seconds=0.0, penetrations=1
    )
    write_brain(Path(folder), fine(recipe))
    return round(float(np.prod(Bench(read_brain(Path(folder))).background.finest.shape)) / 1e6, 2)


def registered(folder: str) -> dict[str, float]:
    """Run the register stage; returns the error of its transform."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.products import RegistrationFiles
    from leadline.pipeline.run import run

    brain = read_brain(Path(folder))
    run(brain, until="register")
    return _error(Path(folder), RegistrationFiles(brain).read().stack_to_atlas)


def _error(folder: Path, stack_to_atlas: Any) -> dict[str, float]:
    import numpy as np

    stack_um, atlas_um = true_points(folder)
    miss_um = np.linalg.norm(stack_to_atlas(stack_um) - atlas_um, axis=1)
    median, p95 = np.percentile(miss_um, [50, 95])
    return {"median_um": float(median), "p95_um": float(p95)}


def true_points(folder: Path) -> tuple[Any, Any]:
    """Points of the tissue: stack um and true atlas um."""
    import pandas as pd

    table = pd.read_csv(folder / "truth" / "points.csv")
    return (
        table[["s0_um", "s1_um", "s2_um"]].to_numpy(float),
        table[["ap_um", "dv_um", "ml_um"]].to_numpy(float),
    )


def prepared(folder: str) -> dict[str, float]:
    """Write what SyN is given, the stack resampled by our affine among it; returns the affine's error."""
    import numpy as np
    from scipy.ndimage import affine_transform

    from leadline.io.brainfile import read_brain
    from leadline.model.settings import RegisterSettings
    from leadline.pipeline.bench import Bench
    from leadline.registration.stage import register

    bench = Bench(read_brain(Path(folder)))
    settings = RegisterSettings(deformable=False)
    background = bench.background.finest
    found = register(
        bench.reduced(bench.background, settings.resolution_um / 2),
        bench.atlas.template,
        bench.atlas.labels,
        settings=settings,
    )
    affine = found.atlas_to_stack.last
    inside = bench.atlas.labels.array() > 0
    voxel_um = bench.atlas.voxel_um
    margin = int(MARGIN_UM / voxel_um[0])
    where = np.argwhere(inside)
    cut = tuple(
        slice(max(0, int(a) - margin), int(b) + margin + 1)
        for a, b in zip(where.min(axis=0), where.max(axis=0), strict=True)
    )
    low_um = np.array([s.start for s in cut]) * voxel_um
    step = affine.matrix * voxel_um / background.voxel_um[:, None]
    shape = inside[cut].shape
    moving = affine_transform(
        background.array().astype(np.float32), step, background.index(affine(low_um[None]))[0], shape, order=1
    )
    stack_um, atlas_um = true_points(Path(folder))
    start_um = affine.inverse()(stack_um)
    np.savez(
        Path(folder) / "syn.npz",
        fixed=bench.atlas.template.array()[cut].astype(np.float32),
        moving=np.minimum(moving, np.percentile(moving, 99.8)),
        mask=inside[cut],
        voxel_um=voxel_um,
        start_um=start_um - low_um,
        atlas_um=atlas_um - low_um,
    )
    return _error(Path(folder), affine.inverse())


def syn_registered(file: str, iterations: list[int], metric: str, sampling: int) -> dict[str, float]:
    """SyN from the affine on; returns CPU seconds of the registration alone and the error of its points."""
    import ants
    import numpy as np
    import pandas as pd

    with np.load(file) as given:
        arrays = dict(given)
    spacing = tuple(arrays["voxel_um"].tolist())
    fixed, moving, mask = (
        ants.from_numpy(arrays[name].astype(np.float32), spacing=spacing) for name in ("fixed", "moving", "mask")
    )
    cpu_s, found = timed(
        lambda: ants.registration(
            fixed,
            moving,
            type_of_transform="SyNOnly",
            initial_transform="Identity",
            mask=mask,
            syn_metric=metric,
            syn_sampling=sampling,
            reg_iterations=tuple(iterations),
            singleprecision=True,
            random_seed=1,
        )
    )
    points = pd.DataFrame(arrays["start_um"], columns=["x", "y", "z"])
    # points go against the images: from the moving stack to the fixed atlas by the inverse of what moves the image
    carried = ants.apply_transforms_to_points(3, points, found["invtransforms"])
    miss_um = np.linalg.norm(carried[["x", "y", "z"]].to_numpy() - arrays["atlas_um"], axis=1)
    median, p95 = np.percentile(miss_um, [50, 95])
    return {"cpu_s": cpu_s, "median_um": float(median), "p95_um": float(p95)}
