"""A tiny brain that is right in every file: the ground on which broken inputs and readers are tested.

Anatomy: 6 x 4 x 5 mm, two hemispheres with cortical layers, white matter and hippocampus as shells; thalamus,
commissure, ventricles, bulbs and cerebellum as blobs; and a notch on the left, so that it is no mirror image of itself.
No part of Leadline is used to write it.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np

ATLAS_UM = 100.0
STACK_UM = 50.0
SHAPE = (64, 44, 56)
N_CONTACTS = 32
N_TRACES = 33
SAMPLING_HZ = 2500.0
ROWS = (
    # id, acronym, name, parent, colour, layer, coarse, tissue, grey value
    (997, "root", "Whole brain", "", "#808080", "", "false", "grey", 0),
    (10, "CTX", "Cerebral cortex", 997, "#70b060", "", "true", "grey", 0),
    (11, "VIP", "Primary visual area", 10, "#70c060", "", "false", "grey", 0),
    (614454277, "VIP1", "Primary visual area, layer 1", 11, "#a0d090", "1", "false", "grey", 180),
    (12, "VIP2/3", "Primary visual area, layer 2/3", 11, "#90c880", "2/3", "false", "grey", 150),
    (13, "VIP5", "Primary visual area, layer 5", 11, "#60a050", "5", "false", "grey", 135),
    (14, "VIP6", "Primary visual area, layer 6", 11, "#508840", "6", "false", "grey", 160),
    (20, "FT", "Fibre tracts", 997, "#cccccc", "", "true", "white", 0),
    (21, "CCB", "Corpus callosum", 20, "#dddddd", "", "false", "white", 70),
    (30, "HPF", "Hippocampal formation", 997, "#60a0c0", "", "true", "grey", 0),
    (4294967295, "CA1p", "Field CA1, pyramidal layer", 30, "#3080b0", "sp", "false", "grey", 100),
    (32, "DGY", "Dentate gyrus", 30, "#80c0d0", "", "false", "grey", 190),
    (40, "VS", "Lateral ventricle", 997, "#aaaaaa", "", "false", "ventricle", 20),
    (22, "ACO", "Anterior commissure", 20, "#d0d0d0", "", "false", "white", 60),
    (50, "THL", "Thalamus", 997, "#e07070", "", "true", "grey", 120),
    (51, "THV", "Ventral nucleus of the thalamus", 50, "#e08080", "", "false", "grey", 155),
    (60, "OBU", "Olfactory bulb", 997, "#9060c0", "", "true", "grey", 200),
    (70, "CBL", "Cerebellum", 997, "#f0e080", "", "true", "grey", 175),
)
CORTEX = ((1050, 32), (930, 4294967295), (850, 21), (700, 14), (520, 13), (320, 12), (120, 614454277))
MIDLINE_UM = 2750.0
_GREY = {row[0]: row[-1] for row in ROWS}
BRAIN_TOML = """\
format = 1

[brain]
name = "tiny-01"

[atlas]
path = "atlas"

[stack]
background = "auto.ome.tif"
dye = "dye.ome.tif"
orientation = "SAL"

[[penetration]]
name = "A"
probe = "probe_a.json"
tip_offset_um = 100.0
points = "a_points.csv"

  [[penetration.recording]]
  lfp = "a_lfp.bin"
  sampling_hz = 2500.0
  n_channels = 33
  dtype = "int16"
  uv_per_bit = 0.5
  skip_channels = [32]
  spikes = "a_spikes.csv"
  events = "a_events.csv"
  exclude = "a_exclude.csv"

[[anchor]]
penetration = "A"
tip_distance_um = 1140.0
track_depth_um = 600.0
sd_um = 40.0
note = "layer 5 to layer 6"
"""


@dataclass(frozen=True)
class Made:
    """Labels (PIR, uint32), template (PIR, uint16), stack channels in their stored order SAL (uint16)."""

    labels: np.ndarray
    template: np.ndarray
    background: np.ndarray
    dye: np.ndarray


def write_good_brain(folder: Path) -> Path:
    """Write the whole brain into ``folder`` and return its ``brain.toml``."""
    import nrrd
    import tifffile

    made, atlas = anatomy(), folder / "atlas"
    atlas.mkdir(parents=True, exist_ok=True)
    header = {
        "space": "right-anterior-superior",
        "space directions": [[0, -ATLAS_UM, 0], [0, 0, -ATLAS_UM], [ATLAS_UM, 0, 0]],
        "space units": ["um"] * 3,
        "encoding": "gzip",
    }
    nrrd.write(str(atlas / "labels.nrrd"), made.labels, header)
    nrrd.write(str(atlas / "template.nrrd"), made.template, header)
    (atlas / "structures.csv").write_text(structures_text())
    (atlas / "atlas.toml").write_text(
        'name = "Tiny atlas"\ncitation = "Invented"\nlicence = "CC0"\nlabels = "labels.nrrd"\n'
        'template = "template.nrrd"\nstructures = "structures.csv"\nbregma_um = [2600.0, 200.0, 2750.0]\n'
    )
    size = {"axes": "ZYX", **{f"PhysicalSize{a}": STACK_UM for a in "XYZ"}}
    size |= {f"PhysicalSize{a}Unit": "µm" for a in "XYZ"}
    for name, voxels in (("auto", made.background), ("dye", made.dye)):
        tifffile.imwrite(folder / f"{name}.ome.tif", voxels, metadata=size)
    (folder / "probe_a.json").write_text(json.dumps(probe()))
    (folder / "a_points.csv").write_text(points_text())
    write_recording(folder)
    (folder / "brain.toml").write_text(BRAIN_TOML)
    return folder / "brain.toml"


def structures_text() -> str:
    """The structure table."""
    lines = ["id,acronym,name,parent_id,colour,layer,coarse,tissue"]
    lines += [",".join(f'"{cell}"' for cell in row[:-1]) for row in ROWS]
    return "\n".join(lines) + "\n"


@cache
def anatomy() -> Made:
    """Labels and template, and the two channels of the stack seen in them, moved by 150 um along each axis."""
    rng = np.random.default_rng(5)
    at = np.stack(np.meshgrid(*(np.arange(n) * ATLAS_UM for n in SHAPE), indexing="ij"), -1)
    labels = label_at(at).astype(np.uint32)
    template = np.vectorize(_GREY.get, otypes=[np.uint16])(np.where(labels == 0, 997, labels))
    fine = np.stack(np.meshgrid(*(np.arange(n * 2) * STACK_UM - 150.0 for n in SHAPE), indexing="ij"), -1)
    seen = np.vectorize(_GREY.get, otypes=[float])(np.where((inside := label_at(fine)) == 0, 997, inside)) * 8.0
    background = np.clip(seen + rng.normal(0, 25, seen.shape) + 120, 0, 65535)
    path = np.array([entry_um(), tip_um()])
    along = np.clip(((fine - path[0]) @ (path[1] - path[0])) / np.sum((path[1] - path[0]) ** 2), 0, 1)
    off_um = np.linalg.norm(fine - (path[0] + along[..., None] * (path[1] - path[0])), axis=-1)
    dye = 0.3 * seen + 4000 * np.exp(-0.5 * (off_um / 50.0) ** 2) + rng.normal(0, 25, seen.shape) + 120
    return Made(labels, template, _stored(background), _stored(np.clip(dye, 0, 65535)))


def _stored(pir: np.ndarray) -> np.ndarray:
    """PIR laid out as SAL: planes grow superior, rows anterior, columns left."""
    return np.ascontiguousarray(np.transpose(pir[::-1, ::-1, ::-1], (1, 0, 2)).astype(np.uint16))


def entry_um() -> np.ndarray:
    """Atlas point near which the probe goes in, where the hand-traced points begin."""
    return np.array([4000.0, 620.0, 3700.0])


def tip_um() -> np.ndarray:
    """Atlas point of the tip: 1.7 mm deeper, in the hippocampus."""
    return np.array([4000.0, 2320.0, 3700.0])


def label_at(at: np.ndarray) -> np.ndarray:
    """Structure id (...) at atlas um (..., 3)."""
    side = np.abs(at[..., 2] - MIDLINE_UM)
    mirrored = np.stack([at[..., 0], at[..., 1], side], -1)

    def blob(ap: float, dv: float, lateral: float, *radii: float, where: np.ndarray = mirrored) -> np.ndarray:
        return np.linalg.norm((where - [ap, dv, lateral]) / radii, axis=-1)

    radius = blob(3300, 2150, 0, 2400, 1850, 2400)
    depth_um = (1.0 - radius) * 1850.0
    ids = np.full(radius.shape, 50)
    for below_um, structure in CORTEX:
        ids[depth_um < below_um] = structure
    ids[(at[..., 1] > 2600) & (depth_um < 1050)] = 50
    ids[(depth_um < 0) | ((side < 80) & (at[..., 1] < 1300))] = 0
    for structure, where in (
        (60, blob(650, 2100, 400, 600, 550, 380)),
        (70, blob(5450, 1800, 0, 750, 1000, 1400)),
        (51, blob(3500, 2600, 450, 500, 400, 400)),
        (40, blob(2900, 1700, 600, 1000, 250, 300)),
        (22, np.hypot(at[..., 0] - 2100, at[..., 1] - 2700) / 170 + (side > 1500)),
    ):
        ids[where < 1] = structure
    ids[blob(1500, 900, -1500, 500, 500, 500, where=at - [0, 0, MIDLINE_UM]) < 1] = 0
    return ids


def probe() -> dict[str, object]:
    """A probeinterface file of one shank, two staggered columns, 50 um apart, without wiring."""
    n = np.arange(N_CONTACTS)
    return {
        "specification": "probeinterface",
        "version": "0.3.2",
        "probes": [
            {
                "ndim": 2,
                "si_units": "um",
                "annotations": {"model_name": "invented", "manufacturer": "invented"},
                "contact_annotations": {},
                "contact_positions": np.column_stack([16.0 * (n % 2), 50.0 * n]).tolist(),
                "contact_plane_axes": [[[1.0, 0.0], [0.0, 1.0]]] * N_CONTACTS,
                "contact_shapes": ["square"] * N_CONTACTS,
                "contact_shape_params": [{"width": 12.0}] * N_CONTACTS,
                "contact_ids": [f"c{k}" for k in n],
                "shank_ids": ["0"] * N_CONTACTS,
            }
        ],
    }


def points_text() -> str:
    """Five hand-traced points in stack um."""
    atlas = np.linspace(entry_um(), tip_um(), 5)
    ap, dv, ml = (atlas + 150.0).T
    last = (np.array(SHAPE) * 2 - 1) * STACK_UM
    rows = np.column_stack([last[1] - dv, last[0] - ap, last[2] - ml])
    return "s0_um,s1_um,s2_um\n" + "".join(f"{a:.1f},{b:.1f},{c:.1f}\n" for a, b, c in rows)


def write_recording(folder: Path) -> None:
    """Six seconds of traces with a depth profile, and their spikes, events and exclusions."""
    rng = np.random.default_rng(6)
    n = int(6 * SAMPLING_HZ)
    gain = 20.0 + 60.0 * np.exp(-0.5 * ((np.arange(N_CONTACTS) - 20) / 5.0) ** 2)
    shared = np.cumsum(rng.normal(0, 0.3, n))
    shared -= np.convolve(shared, np.ones(500) / 500, "same")
    traces = np.zeros((n, N_TRACES), "<i2")
    traces[:, :N_CONTACTS] = np.rint(shared[:, None] * gain + rng.normal(0, 20, (n, N_CONTACTS)))
    traces[::250, N_CONTACTS] = 1
    traces.tofile(folder / "a_lfp.bin")
    time_s = np.sort(rng.uniform(0, 6, 400))
    unit = rng.integers(0, 12, 400)
    lines = [f"{t:.5f},u{u},{100 + 130 * u},{40 + 8 * u}" for t, u in zip(time_s, unit, strict=True)]
    (folder / "a_spikes.csv").write_text("time_s,unit_id,tip_distance_um,amplitude_uv\n" + "\n".join(lines) + "\n")
    events = "".join(f"{t:.1f},flash\n" for t in np.arange(0.5, 5.6, 0.5))
    (folder / "a_events.csv").write_text("time_s,kind\n" + events)
    (folder / "a_exclude.csv").write_text("start_s,stop_s\n2.1,2.4\n")
