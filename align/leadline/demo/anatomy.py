"""The anatomy of the invented brain as a formula: which structure is at a point, anywhere, at no resolution.

Built from ellipsoids and from curved sheets that follow the surface of a hemisphere (cortical layers, white matter,
hippocampal strata); left and right mirror each other. Atlas um (ap, dv, ml).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray, IntArray
from leadline.demo.structures import AREAS, LAYERS, code_of, greys, ids, structures
from leadline.model.atlas import Atlas
from leadline.model.volume import Volume

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe

BOX_UM = np.array([11200.0, 7200.0, 10000.0])
MIDLINE_UM = 5000.0
BREGMA_UM = np.array([4700.0, 500.0, 5000.0])
_CHUNK = 1 << 17
Triple: TypeAlias = tuple[float, float, float]

# centre (ap, dv, distance from the midline) and radii, um
_HEMISPHERE = ((4900, 3350, 2420), (3750, 2680, 2350))
_STEM = ((6550, 4400, 0), (3600, 2050, 1950))
_BRIDGE = ((4800, 3500, 0), (1900, 800, 800))
_BULB = ((1350, 3400, 800), (1000, 850, 720))
_CEREBELLUM = ((9500, 2500, 0), (1300, 1500, 2900))
_THALAMUS = ((5700, 4050, 1050), (1250, 900, 1150))
_WHITE_UM = 170.0
_HIPPOCAMPUS = 1230.0

# Later rows lie over earlier ones.
_LUMPS: tuple[tuple[str, Triple, Triple], ...] = (
    ("AMC", (5500, 5400, 2600), (900, 900, 1100)),
    ("CPU", (3900, 3250, 2450), (1500, 1250, 1150)),
    ("ACB", (2800, 4450, 1400), (650, 650, 750)),
    ("LSX", (3800, 3500, 0), (800, 850, 600)),
    ("SBI", (4200, 4900, 1800), (900, 400, 900)),
    ("GPX", (4900, 3900, 2450), (550, 600, 480)),
    ("CEN", (5100, 4600, 2750), (500, 400, 380)),
    ("BLN", (5500, 4950, 3200), (700, 550, 420)),
    ("SNR", (7000, 5150, 1450), (520, 240, 560)),
    ("VTA", (7000, 5150, 450), (420, 320, 380)),
    ("RDN", (7150, 4550, 600), (300, 280, 280)),
    ("ACM", (3700, 4350, 900), (130, 150, 1500)),
    ("OTR", (5400, 5700, 1500), (700, 220, 520)),
    ("CPD", (7000, 5520, 1550), (750, 150, 520)),
)
_NUCLEI: tuple[tuple[str, Triple], ...] = (
    ("TLD", (5250, 3350, 1250)),
    ("TLP", (6250, 3450, 1350)),
    ("TLG", (6400, 3700, 2050)),
    ("TVM", (5900, 4350, 1550)),
    ("TVL", (5650, 4150, 2000)),
    ("TPO", (5900, 3850, 1150)),
    ("TMD", (5200, 3800, 400)),
    ("TCL", (5500, 3450, 750)),
    ("TVA", (4950, 4050, 1200)),
    ("TRE", (5100, 4650, 300)),
)
_HYPOTHALAMIC: tuple[tuple[str, Triple], ...] = (
    ("HLA", (5600, 5350, 1150)),
    ("HDM", (5900, 5200, 350)),
    ("HVM", (5600, 5900, 400)),
    ("HAN", (4800, 5500, 400)),
    ("HMM", (6600, 5800, 300)),
)


def _inside(p: Float32Array, shape: tuple[Triple, Triple]) -> Float32Array:
    """Depth below an ellipsoid's surface, um, to first order; negative outside."""
    centre, radii = shape
    scaled = [(p[k] - np.float32(centre[k])) / np.float32(radii[k]) for k in range(3)]
    f = np.sqrt(scaled[0] ** 2 + scaled[1] ** 2 + scaled[2] ** 2) + np.float32(1e-6)
    g = np.sqrt(sum((s / np.float32(r)) ** 2 for s, r in zip(scaled, radii, strict=True))) + np.float32(1e-9)
    return np.asarray((1 - f) * f / g, np.float32)


def _within(p: Float32Array, centre: Triple, radii: Triple) -> Float32Array:
    """Squared radius in units of an ellipsoid's radii: below 1 inside."""
    total = np.zeros(p.shape[1], np.float32)
    for k in range(3):
        total += ((p[k] - np.float32(centre[k])) / np.float32(radii[k])) ** 2
    return total


def _folded(points_um: FloatArray) -> Float32Array:
    """(3, n) float32: ap, dv, distance from the midline."""
    p = np.ascontiguousarray(np.asarray(points_um).T, np.float32)
    p[2] = np.abs(p[2] - np.float32(MIDLINE_UM))
    return p


def _toed_in(p: Float32Array) -> Float32Array:
    """The frame of a hemisphere, which leans to the midline in front."""
    q = p.copy()
    q[2] += np.float32(0.22) * np.maximum(np.float32(4200.0) - p[0], 0)
    return q


def _surface(p: Float32Array) -> Float32Array:
    depth = _inside(_toed_in(p), _HEMISPHERE)
    for shape in (_STEM, _BRIDGE, _BULB, _CEREBELLUM):
        np.maximum(depth, _inside(p, shape), out=depth)
    return depth


def surface_depth_um(points_um: FloatArray) -> FloatArray:
    """Signed depth ``(n,)`` below the brain's surface at points ``(n, 3)``: 0 on it, negative outside."""
    return _surface(_folded(points_um)).astype(np.float64)


def codes_at(points_um: FloatArray) -> AnyArray:
    """Structure codes ``(n,)`` int16 at atlas points ``(n, 3)``; 0 outside the brain."""
    points = np.asarray(points_um)
    found = np.zeros(len(points), np.int16)
    for start in range(0, len(points), _CHUNK):
        p = _folded(points[start : start + _CHUNK])
        inside = np.flatnonzero(_surface(p) > 0)
        if inside.size:
            found[start + inside] = _codes(np.ascontiguousarray(p[:, inside]))
    return found


def ids_at(points_um: FloatArray) -> IntArray:
    """Structure ids ``(n,)`` at atlas points ``(n, 3)``."""
    return ids()[codes_at(points_um)]


def _codes(p: Float32Array) -> AnyArray:
    """Codes of folded points inside the brain, from the depths of the brain outwards."""
    codes = np.full(p.shape[1], code_of("HRT"), np.int16)
    _deep(p, codes)
    q = _toed_in(p)
    depth = _inside(q, _HEMISPHERE)
    hemisphere = np.flatnonzero(depth > 0)
    codes[hemisphere] = _mantle(np.ascontiguousarray(q[:, hemisphere]), codes[hemisphere])
    _ventricles(p, codes)
    _ends(p, codes, np.flatnonzero(depth <= 0))
    return codes


def _deep(p: Float32Array, codes: AnyArray) -> None:
    ap, dv, m = p
    codes[ap < 8500] = code_of("MRT")
    codes[(ap < 8900) & (dv > 5300) & (ap > 7700)] = code_of("PNS")
    codes[ap < 6600] = code_of("SBI")
    codes[ap < 3000] = code_of("AON")
    low = np.flatnonzero((dv > 4700) & (m < 1600) & (ap > 4300) & (ap < 6800))
    codes[low] = _nearest(p[:, low], _HYPOTHALAMIC)
    _colliculi(p, codes)
    for acronym, centre, radii in _LUMPS:
        codes[_within(p, centre, radii) < 1] = code_of(acronym)
    _thalamus(p, codes)


def _thalamus(p: Float32Array, codes: AnyArray) -> None:
    ap, dv, m = p
    r = _within(p, *_THALAMUS)
    codes[(r < 1.35) & (r >= 1.0) & (m > 900)] = code_of("INC")
    codes[(r < 1.6) & (r >= 1.0) & (dv < 3900) & (m < 2300) & (ap > 4800) & (ap < 6700)] = code_of("FIM")
    codes[(_within(p, (5850, 4980, 1350), (700, 200, 650)) < 1)] = code_of("ZNI")
    inner = np.flatnonzero(r < 1)
    codes[inner] = _nearest(p[:, inner], _NUCLEI)
    codes[(r < 1) & (r > 0.76) & (m > 1500) & (ap < 6100)] = code_of("TRT")
    codes[_within(p, (5700, 3230, 380), (380, 230, 260)) < 1] = code_of("HAB")


def _colliculi(p: Float32Array, codes: AnyArray) -> None:
    roof = np.flatnonzero(_within(p, (7850, 3000, 0), (1250, 1750, 1900)) < 1)
    depth, back = _inside(p[:, roof], _STEM), p[0, roof]
    layers = np.where(depth < 380, code_of("SCS"), np.where(depth < 820, code_of("SCI"), code_of("SCD")))
    layers = np.where(depth > 1250, code_of("PAG"), layers)
    codes[roof] = np.where((back > 8250) & (depth < 1250), code_of("ICN"), layers)


def _mantle(p: Float32Array, codes: AnyArray) -> AnyArray:
    """What follows the surface of a hemisphere: cortex, white matter below it, hippocampus."""
    ap, dv, m = p
    centre = _HEMISPHERE[0]
    depth = _inside(p, _HEMISPHERE)
    angle = np.degrees(np.arctan2(m - np.float32(centre[2]), np.float32(centre[1]) - dv))
    thick = 1080 - 130 * np.tanh((ap - 5200) / 1500) - 1.2 * np.abs(angle - 20)
    white = _WHITE_UM + 90 * np.exp(-(((angle + 35) / 45) ** 2))
    cortical = (angle > -78) & (angle < 104)
    below = depth - thick - white
    field = np.flatnonzero(cortical & (below > 0) & (below < _HIPPOCAMPUS))
    codes[field] = _hippocampus(below[field], angle[field], ap[field], codes[field])
    shell = cortical & (depth >= thick) & (below <= 0)
    codes[shell] = np.where(angle[shell] < 40, code_of("CCB"), code_of("EXC"))
    sheet = np.flatnonzero(cortical & (depth < thick))
    codes[sheet] = _cortex(depth[sheet] / thick[sheet], angle[sheet], ap[sheet])
    rim = (angle >= 104) & (angle < 150) & (depth < 750)
    codes[rim] = np.select(
        [depth[rim] < 250, depth[rim] < 400], [code_of("PIR1"), code_of("PIR2")], default=code_of("PIR3")
    )
    return codes


def _cortex(fraction: Float32Array, angle: Float32Array, ap: Float32Array) -> AnyArray:
    """Area by the nearest seed on the unrolled hemisphere, layer by the share of the cortical thickness."""
    wavy = angle + 4 * np.sin(ap / 450)
    best, area = np.full(ap.shape, np.inf, np.float32), np.zeros(ap.shape, np.int8)
    borders = np.zeros((5, ap.size), np.float32)
    total = np.full(ap.shape, 1e-12, np.float32)
    for k, seed in enumerate(AREAS):
        far = (ap - seed.ap_um) ** 2 + (np.float32(42.0) * (wavy - seed.angle_deg)) ** 2
        nearer = far < best
        best[nearer], area[nearer] = far[nearer], k
        # Layer borders glide from area to area over about 0.4 mm, as they do in sections.
        weight = np.exp(-far / np.float32(2 * 500.0**2)) + np.float32(1e-7) / (far + 1)
        total += weight
        edges = np.cumsum(seed.layers_um)[:-1] / np.sum(seed.layers_um)
        borders += weight * edges.astype(np.float32)[:, None]
    layer = (fraction > borders / total).sum(axis=0)
    return np.asarray(_layer_codes()[area, layer])


def _layer_codes() -> AnyArray:
    """(areas, layers) codes; where an area has no layer 4 its place belongs to layer 5."""
    table = np.zeros((len(AREAS), len(LAYERS)), np.int16)
    for k, area in enumerate(AREAS):
        for j, layer in enumerate(LAYERS):
            present = layer if area.layers_um[j] > 0 else "5"
            table[k, j] = code_of(area.acronym + present)
    return table


def _hippocampus(below: Float32Array, angle: Float32Array, ap: Float32Array, codes: AnyArray) -> AnyArray:
    """Strata by the distance below the white matter, thinner toward the rim of the formation."""
    room = np.minimum(1.35 - ((ap - 6150) / 1600) ** 2 - ((angle - 15) / 85) ** 2, 1)
    e = below / np.sqrt(np.maximum(room, 0.05))
    out = np.where(
        e < 60,
        code_of("ALV"),
        np.where(
            e < 185,
            code_of("CA1o"),
            np.where(e < 245, code_of("CA1p"), np.where(e < 440, code_of("CA1r"), code_of("CA1l"))),
        ),
    )
    gyrus = ((e - 860) / 320) ** 2 + ((angle + 16) / 46) ** 2
    blade = np.select([gyrus < 0.15, gyrus < 0.34], [code_of("DGp"), code_of("DGg")], default=code_of("DGm"))
    out = np.where(gyrus < 1, blade, out)
    field = ((e - 800) / 360) ** 2 + ((angle - 62) / 30) ** 2
    strata = np.select([field < 0.3, field < 0.52], [code_of("CA3r"), code_of("CA3p")], default=code_of("CA3o"))
    out = np.where((field < 1) & (gyrus >= 1), strata, out)
    gap = np.where(angle > 5, code_of("FIM"), code_of("VLT"))
    out = np.where(e > 1185, gap, out)
    return np.where((room > 0.05) & (e < _HIPPOCAMPUS), out, codes)


def _ventricles(p: Float32Array, codes: AnyArray) -> None:
    ap, dv, m = p
    codes[(_within(p, (4500, 2850, 0), (1900, 200, 1000)) < 1)] = code_of("CCB")
    wall = 700 + 0.35 * (dv - 3000)
    slit = (np.abs(m - wall) < 90 * np.clip(1 - np.abs(ap - 3900) / 1300, 0, 1)) & (np.abs(dv - 3400) < 500)
    codes[slit] = code_of("VLT")
    codes[_within(p, (5600, 4600, 0), (1200, 1150, 70)) < 1] = code_of("VTH")
    codes[_within(p, (7700, 4000, 0), (1100, 110, 110)) < 1] = code_of("VAQ")
    codes[_within(p, (9400, 4050, 0), (750, 170, 600)) < 1] = code_of("VFO")


def _ends(p: Float32Array, codes: AnyArray, free: AnyArray) -> None:
    """Bulbs in front, cerebellum behind, where no hemisphere lies (rows ``free``)."""
    behind = free[p[0, free] > 8300]
    depth = _inside(p[:, behind], _CEREBELLUM)
    folia = depth + 70 * np.sin(p[0, behind] / 90) * np.sin(p[1, behind] / 110)
    parts = np.select([folia < 260, folia < 480, folia < 900], [code_of("CBM"), code_of("CBG"), code_of("ARB")])
    parts = np.where(parts == 0, code_of("CBN"), parts)
    codes[behind] = np.where((depth > 0) & (codes[behind] != code_of("VFO")), parts, codes[behind])
    ahead = free[p[0, free] < 2400]
    depth = _inside(p[:, ahead], _BULB)
    parts = np.select([depth < 150, depth < 330], [code_of("OBG"), code_of("OBP")], default=code_of("OBC"))
    codes[ahead] = np.where(depth > 0, parts, codes[ahead])


def _nearest(p: Float32Array, seeds: tuple[tuple[str, Triple], ...]) -> AnyArray:
    best = np.full(p.shape[1], np.inf, np.float32)
    found = np.zeros(p.shape[1], np.int16)
    for acronym, centre in seeds:
        far = _within(p, centre, (1.0, 0.8, 0.9))
        nearer = far < best
        best[nearer], found[nearer] = far[nearer], code_of(acronym)
    return found


def grid_points(shape: tuple[int, ...], voxel_um: float, planes: slice) -> FloatArray:
    """Points ``(n, 3)`` at the voxel centres of some planes of a PIR grid."""
    axes = [np.arange(*planes.indices(shape[0])), np.arange(shape[1]), np.arange(shape[2])]
    mesh = np.meshgrid(*[a * voxel_um for a in axes], indexing="ij")
    return np.stack([m.ravel() for m in mesh], axis=1).astype(np.float32)


def shared_texture(recipe: Recipe) -> Float32Array:
    """Brightness that differs smoothly within structures, alike in every brain: (AP, DV, ML) every 100 um, about 1."""
    from scipy.ndimage import gaussian_filter

    rng = np.random.default_rng([recipe.seed, 11])
    field = gaussian_filter(rng.standard_normal(tuple(int(n / 100) + 1 for n in BOX_UM), np.float32), 1.6)
    return np.asarray(1 + 0.035 * field / field.std(), np.float32)


def make_atlas(recipe: Recipe) -> Atlas:
    """The labelled reference atlas of the invented brain: labels (uint32) and a smooth template (float32)."""
    from scipy.ndimage import gaussian_filter, map_coordinates

    voxel = recipe.atlas_voxel_um
    shape = tuple(int(n) for n in np.rint(BOX_UM / voxel))
    codes = np.zeros(shape, np.int16)
    for start in range(0, shape[0], 16):
        planes = slice(start, min(start + 16, shape[0]))
        codes[planes] = codes_at(grid_points(shape, voxel, planes)).reshape(-1, *shape[1:])
    template = gaussian_filter(100 * greys().astype(np.float32)[codes], 30.0 / voxel)
    where = np.meshgrid(*[np.arange(n, dtype=np.float32) * voxel / 100 for n in shape], indexing="ij")
    template *= map_coordinates(shared_texture(recipe), where, order=1, mode="nearest")
    return Atlas(
        "invented brain",
        Volume(ids().astype(np.uint32)[codes], np.full(3, voxel), "PIR"),
        Volume(template.astype(np.float32), np.full(3, voxel), "PIR"),
        structures(),
        "drawn by formula; no animal",
        "BSD-3-Clause",
        BREGMA_UM,
    )
