"""The structures of the invented brain: a tree with sparse ids, and how bright each is without dye."""

from __future__ import annotations

import colorsys
import zlib
from dataclasses import dataclass
from functools import cache

import numpy as np

from leadline.base.arrays import FloatArray, IntArray
from leadline.model.atlas import Structure, Structures

LAYERS = ("1", "2/3", "4", "5", "6a", "6b")
_LAYER_GREY = (1.25, 1.0, 1.12, 0.92, 1.02, 0.86)


@dataclass(frozen=True, slots=True)
class Area:
    """A cortical area: where it lies on the hemisphere (ap um, angle from the top, lateral +) and its layers.

    ``layers_um`` : thickness of layers 1, 2/3, 4, 5, 6a, 6b; only their proportions are used.
    """

    acronym: str
    name: str
    ap_um: float
    angle_deg: float
    layers_um: tuple[float, float, float, float, float, float]


# Layer thicknesses. Visual: means of Gouwens et al. (2019), Nat. Neurosci. 22, 1182 (from memory). Somatosensory:
# Lefort et al. (2009), Neuron 61, 301, C2 column, layer 6b split off at 50 um (common practice, no source).
# Agranular and association areas: common practice, no source.
_VISUAL = (115.1, 218.4, 120.2, 234.0, 195.5, 39.5)
_SOMATIC = (128.0, 290.0, 170.0, 302.0, 214.0, 50.0)
_MOTOR = (140.0, 310.0, 0.0, 450.0, 300.0, 50.0)
_MIDLINE = (170.0, 220.0, 0.0, 380.0, 240.0, 40.0)
_TEMPORAL = (130.0, 260.0, 100.0, 280.0, 220.0, 45.0)
AREAS = (
    Area("FRO", "Frontal pole", 1750, 0, _MOTOR),
    Area("PRL", "Prelimbic area", 2300, -50, _MIDLINE),
    Area("CGA", "Cingulate area", 3900, -50, _MIDLINE),
    Area("RSA", "Retrosplenial area", 6400, -45, _MIDLINE),
    Area("MOS", "Secondary motor area", 3100, -8, _MOTOR),
    Area("MOP", "Primary motor area", 3300, 28, _MOTOR),
    Area("SFL", "Primary somatosensory area, forelimb", 3900, 58, _SOMATIC),
    Area("SBF", "Primary somatosensory area, whisker field", 5100, 58, _SOMATIC),
    Area("STR", "Primary somatosensory area, trunk", 5000, 18, _SOMATIC),
    Area("PAR", "Posterior parietal area", 6000, 12, _TEMPORAL),
    Area("VIP", "Primary visual area", 7200, 22, _VISUAL),
    Area("VIM", "Medial visual area", 6900, -12, _VISUAL),
    Area("VIL", "Lateral visual area", 7000, 52, _VISUAL),
    Area("AUD", "Primary auditory area", 6200, 76, _TEMPORAL),
    Area("TMP", "Temporal association area", 7000, 90, _TEMPORAL),
    Area("INS", "Insular area", 3600, 88, _MIDLINE),
)

# acronym | name | parent | tissue | layer | coarse | brightness of the template (grey matter is about 1)
_TABLE = """
WB   | Whole brain | | grey | | | 1.0
GM   | Grey matter | WB | grey | | | 1.0
FT   | Fibre tracts | WB | white | | coarse | 0.70
VS   | Ventricular system | WB | ventricle | | coarse | 0.22
ISO  | Isocortex | GM | grey | | coarse | 1.0
OLF  | Olfactory areas | GM | grey | | coarse | 1.0
OBG  | Olfactory bulb, glomerular layer | OLF | grey | | | 1.30
OBP  | Olfactory bulb, outer plexiform layer | OLF | grey | | | 0.92
OBC  | Olfactory bulb, granule layer | OLF | grey | | | 1.08
AON  | Anterior olfactory nucleus | OLF | grey | | | 1.04
PIR  | Piriform area | OLF | grey | | | 1.0
PIR1 | Piriform area, layer 1 | PIR | grey | 1 | | 1.22
PIR2 | Piriform area, layer 2 | PIR | grey | 2 | | 0.84
PIR3 | Piriform area, layer 3 | PIR | grey | 3 | | 1.05
HPF  | Hippocampal formation | GM | grey | | coarse | 1.0
CA1  | Field CA1 | HPF | grey | | | 1.0
CA1o | Field CA1, stratum oriens | CA1 | grey | so | | 1.02
CA1p | Field CA1, pyramidal layer | CA1 | grey | sp | | 0.78
CA1r | Field CA1, stratum radiatum | CA1 | grey | sr | | 1.10
CA1l | Field CA1, stratum lacunosum-moleculare | CA1 | grey | slm | | 1.24
CA3  | Field CA3 | HPF | grey | | | 1.0
CA3o | Field CA3, stratum oriens | CA3 | grey | so | | 0.98
CA3p | Field CA3, pyramidal layer | CA3 | grey | sp | | 0.80
CA3r | Field CA3, stratum radiatum | CA3 | grey | sr | | 1.12
DGY  | Dentate gyrus | HPF | grey | | | 1.0
DGm  | Dentate gyrus, molecular layer | DGY | grey | mo | | 1.16
DGg  | Dentate gyrus, granule cell layer | DGY | grey | sg | | 0.74
DGp  | Dentate gyrus, polymorph layer | DGY | grey | po | | 0.97
STM  | Striatum | GM | grey | | coarse | 0.95
CPU  | Caudoputamen | STM | grey | | | 0.93
ACB  | Nucleus accumbens | STM | grey | | | 1.03
LSX  | Lateral septal nucleus | STM | grey | | | 1.06
CEN  | Central amygdalar nucleus | STM | grey | | | 1.08
PLD  | Pallidum | GM | grey | | coarse | 0.85
GPX  | Globus pallidus | PLD | grey | | | 0.82
SBI  | Substantia innominata | PLD | grey | | | 0.95
AMY  | Amygdalar complex | GM | grey | | coarse | 1.03
BLN  | Basolateral amygdalar nucleus | AMY | grey | | | 1.05
AMC  | Cortical amygdalar area | AMY | grey | | | 1.0
THL  | Thalamus | GM | grey | | coarse | 1.0
TLD  | Lateral dorsal nucleus of the thalamus | THL | grey | | | 1.06
TLP  | Lateral posterior nucleus of the thalamus | THL | grey | | | 0.98
TLG  | Dorsal lateral geniculate nucleus | THL | grey | | | 1.10
TVM  | Ventral posteromedial nucleus of the thalamus | THL | grey | | | 0.88
TVL  | Ventral posterolateral nucleus of the thalamus | THL | grey | | | 0.92
TPO  | Posterior complex of the thalamus | THL | grey | | | 0.97
TMD  | Mediodorsal nucleus of the thalamus | THL | grey | | | 1.08
TCL  | Central lateral nucleus of the thalamus | THL | grey | | | 1.01
TVA  | Ventral anterior-lateral complex of the thalamus | THL | grey | | | 0.90
TRT  | Reticular nucleus of the thalamus | THL | grey | | | 0.80
TRE  | Nucleus of reuniens | THL | grey | | | 1.04
HAB  | Habenula | THL | grey | | | 1.15
HYP  | Hypothalamus | GM | grey | | coarse | 1.0
HLA  | Lateral hypothalamic area | HYP | grey | | | 0.96
HDM  | Dorsomedial hypothalamic nucleus | HYP | grey | | | 1.08
HVM  | Ventromedial hypothalamic nucleus | HYP | grey | | | 1.12
HAN  | Anterior hypothalamic nucleus | HYP | grey | | | 1.02
HMM  | Mammillary body | HYP | grey | | | 1.0
ZNI  | Zona incerta | HYP | grey | | | 0.90
MBR  | Midbrain | GM | grey | | coarse | 0.95
SCS  | Superior colliculus, superficial grey layer | MBR | grey | | | 1.18
SCI  | Superior colliculus, intermediate grey layer | MBR | grey | | | 0.96
SCD  | Superior colliculus, deep grey layer | MBR | grey | | | 0.88
ICN  | Inferior colliculus | MBR | grey | | | 0.97
PAG  | Periaqueductal grey | MBR | grey | | | 1.08
MRT  | Midbrain reticular nucleus | MBR | grey | | | 0.88
SNR  | Substantia nigra, reticular part | MBR | grey | | | 0.82
VTA  | Ventral tegmental area | MBR | grey | | | 0.98
RDN  | Red nucleus | MBR | grey | | | 0.86
HBR  | Hindbrain | GM | grey | | coarse | 0.85
PNS  | Pontine grey | HBR | grey | | | 0.95
HRT  | Hindbrain reticular area | HBR | grey | | | 0.82
CBL  | Cerebellum | GM | grey | | coarse | 1.0
CBM  | Cerebellar cortex, molecular layer | CBL | grey | | | 1.20
CBG  | Cerebellar cortex, granule layer | CBL | grey | | | 0.86
CBN  | Cerebellar nuclei | CBL | grey | | | 0.92
CCB  | Corpus callosum | FT | white | | | 0.66
EXC  | External capsule | FT | white | | | 0.70
ALV  | Alveus | FT | white | | | 0.64
FIM  | Fimbria | FT | white | | | 0.60
INC  | Internal capsule | FT | white | | | 0.68
CPD  | Cerebral peduncle | FT | white | | | 0.66
ACM  | Anterior commissure | FT | white | | | 0.62
OTR  | Optic tract | FT | white | | | 0.60
ARB  | Cerebellar white matter | FT | white | | | 0.62
VLT  | Lateral ventricle | VS | ventricle | | | 0.20
VTH  | Third ventricle | VS | ventricle | | | 0.20
VAQ  | Cerebral aqueduct | VS | ventricle | | | 0.20
VFO  | Fourth ventricle | VS | ventricle | | | 0.20
"""


@dataclass(frozen=True, slots=True)
class Kind:
    """One structure of the invented brain; its place in :func:`kinds` is its code."""

    acronym: str
    name: str
    parent: str
    tissue: str
    layer: str
    coarse: bool
    grey: float


@cache
def kinds() -> tuple[Kind, ...]:
    """All structures, code by code; code 0 is outside the brain."""
    rows = [Kind("outside", "outside the brain", "", "outside", "", False, 0.0)]
    for line in _TABLE.strip().splitlines():
        acronym, name, parent, tissue, layer, coarse, shade = (cell.strip() for cell in line.split("|"))
        rows.append(Kind(acronym, name, parent, tissue, layer, coarse == "coarse", float(shade)))
    for k, area in enumerate(AREAS):
        tint = float(1.0 + 0.02 * np.sin(2.4 * k))
        rows.append(Kind(area.acronym, area.name, "ISO", "grey", "", False, tint))
        for layer, grey, thick in zip(LAYERS, _LAYER_GREY, area.layers_um, strict=True):
            if thick > 0:
                rows.append(
                    Kind(
                        area.acronym + layer,
                        f"{area.name}, layer {layer}",
                        area.acronym,
                        "grey",
                        layer,
                        False,
                        grey * tint,
                    )
                )
    return tuple(rows)


@cache
def code_of(acronym: str) -> int:
    """Code of a structure."""
    return next(k for k, kind in enumerate(kinds()) if kind.acronym == acronym)


@cache
def ids() -> IntArray:
    """Structure id of each code: sparse, most of them too large for float32, 0 outside."""
    found = [0] + [1 + zlib.crc32(kind.acronym.encode()) % (2**32 - 1) for kind in kinds()[1:]]
    array = np.array(found, np.int64)
    if len(np.unique(array)) != len(array):
        raise ValueError("two structures of the invented brain share an id")
    array.setflags(write=False)
    return array


def greys() -> FloatArray:
    """Brightness of each code in the template."""
    return np.array([kind.grey for kind in kinds()])


def structures() -> Structures:
    """The structure table."""
    number = {kind.acronym: int(k) for kind, k in zip(kinds(), ids(), strict=True)}
    rows = []
    for k, kind in enumerate(kinds()[1:], start=1):
        red, green, blue = colorsys.hsv_to_rgb((k * 0.381966) % 1.0, 0.45 if kind.tissue == "grey" else 0.1, 0.85)
        rows.append(
            Structure(
                number[kind.acronym],
                kind.acronym,
                kind.name,
                number[kind.parent] if kind.parent else None,
                f"#{int(red * 255):02x}{int(green * 255):02x}{int(blue * 255):02x}",
                kind.layer,
                kind.coarse,
                kind.tissue,
            )
        )
    return Structures(tuple(rows))
