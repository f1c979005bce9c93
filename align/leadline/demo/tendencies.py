"""How tissue sounds: what each type of structure tends to do, and how far a population, an animal and a place stray.

The signs follow published work: superficial cortex nearly silent, layer 5 loud and large-spiked (Senzai et al. 2019,
Neuron 101, 500), white matter and molecular layers poor in cells, ripple power and cells in the CA1 pyramidal layer
(Buzsaki 2015, Hippocampus 25, 1073), theta greatest about the fissure (Bragin et al. 1995, J. Neurosci. 15, 47),
fast gamma and dense small cells in the dentate gyrus, dense fast units in the thalamus. The sizes are invented, and
every seed draws its own.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.demo.structures import kinds

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe
    from leadline.demo.structures import Kind

FEATURES = ("delta", "theta", "gamma", "ripple", "high", "density", "rate", "amplitude", "width")
# type: power in five bands (units of 3 dB), then log density, log rate, log amplitude, width
_TABLE = """
outside   -2.0 -2.2 -2.6 -3.0 -3.2  -9.0  0.0  0.0  0.0
other      0.0  0.0  0.0  0.0  0.0   0.0  0.0  0.0  0.0
L1        -0.3 -0.2 -0.9 -0.8 -1.3  -2.0 -0.2 -0.7 -0.2
L2        -0.1 -0.3 -0.2 -0.3 -0.4  -0.1 -0.6 -0.3  0.3
L4        -0.1 -0.3  0.4  0.2  0.5   0.7  0.3 -0.3 -0.3
L5         1.0 -0.2  0.3  0.5  1.1   0.9  0.6  0.9  0.4
L6         0.6 -0.3 -0.1  0.0  0.1   0.1 -0.3  0.0  0.2
white     -0.2  0.2 -0.9 -0.7 -1.3  -2.4 -0.3 -0.6 -1.6
fluid     -0.7  0.0 -1.7 -1.9 -2.0  -9.0  0.0  0.0  0.0
so         0.0  0.7  0.1  0.9 -0.2  -0.9  0.2 -0.3 -0.5
sp        -0.1  0.4  0.4  2.3  1.5   1.5  0.1  0.6  0.5
sr         0.5  0.5 -0.2  0.6 -0.7  -1.6 -0.2 -0.5 -0.3
slm        0.5  1.8  0.1 -0.3 -0.9  -1.8 -0.2 -0.6 -0.3
mo         0.4  1.5  0.6 -0.2 -0.3  -1.0  0.0 -0.4 -0.2
sg         0.1  0.8  1.3  0.2  0.9   1.3 -0.6  0.1  0.1
po         0.0  0.6  1.3  0.1  0.3   0.2  0.5  0.1 -0.2
thalamus  -0.6 -0.5 -0.3 -0.3  0.7   0.9  0.7  0.2 -0.2
shell     -0.5 -0.4  0.0  0.0  0.9   0.9  1.0  0.1 -1.0
striatum   0.3 -0.3 -0.2 -0.3 -0.3   0.3 -0.7 -0.3  0.3
pallidum  -0.2 -0.3  0.0  0.0  0.5  -0.2  1.1  0.4 -0.6
midbrain  -0.6 -0.2 -0.3 -0.2  0.4   0.4  0.6  0.5  0.0
tectum    -0.3 -0.2  0.5  0.2  0.8   0.9  0.4 -0.2 -0.2
base      -0.4  0.0 -0.5 -0.3  0.0   0.2  0.1 -0.2  0.2
"""
_BY_LAYER = {"1": "L1", "2": "L2", "2/3": "L2", "3": "L2", "4": "L4", "5": "L5", "6a": "L6", "6b": "L6"}
_BY_PARENT = {"THL": "thalamus", "STM": "striatum", "PLD": "pallidum", "MBR": "midbrain", "HYP": "base", "AMY": "base"}
_BY_ACRONYM = {"TRT": "shell", "SCS": "tectum", "SCI": "tectum"}


@cache
def types() -> tuple[str, ...]:
    """Names of the types, in the order of the table."""
    return tuple(line.split()[0] for line in _TABLE.strip().splitlines())


@cache
def _tendencies() -> FloatArray:
    return np.array([[float(x) for x in line.split()[1:]] for line in _TABLE.strip().splitlines()])


def type_of(kind: Kind) -> str:
    """Type of a structure."""
    if kind.tissue != "grey":
        return {"white": "white", "ventricle": "fluid", "outside": "outside"}[kind.tissue]
    if kind.layer:
        return _BY_LAYER.get(kind.layer, kind.layer)
    return _BY_ACRONYM.get(kind.acronym, _BY_PARENT.get(kind.parent, "other"))


@cache
def type_codes() -> AnyArray:
    """Type index of each structure code."""
    return np.array([types().index(type_of(kind)) for kind in kinds()])


def structure_means(recipe: Recipe) -> FloatArray:
    """What each structure of this animal does, ``(codes, features)``.

    Population means are drawn about the published tendencies, then the animal's own, then each structure's own: two
    nuclei of the thalamus differ although their type is one.
    """
    rng = np.random.default_rng([recipe.seed, 80])
    tendency = _tendencies()
    weak = 1 - 0.35 * recipe.rough
    population = weak * tendency * rng.uniform(0.6, 1.3, tendency.shape) + 0.3 * rng.standard_normal(tendency.shape)
    animal = population + 0.3 * (1 + 0.4 * recipe.rough) * rng.standard_normal(tendency.shape)
    own = rng.standard_normal((len(kinds()), len(FEATURES)))
    layered = np.array([0.2 if kind.layer else 0.45 for kind in kinds()])[:, None]
    means = animal[type_codes()] + layered * own
    silent = np.isin(type_codes(), [types().index("outside"), types().index("fluid")])
    means[silent] = tendency[type_codes()[silent]]
    return np.asarray(means)
