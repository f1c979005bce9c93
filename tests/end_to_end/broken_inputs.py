"""More broken brains: recordings, tables, anchors and brain.toml itself; see tests.leadline.io.broken_cases."""

from __future__ import annotations

import shutil
import sys
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING

import numpy as np
from tests.good_brain import write_good_brain
from tests.leadline.io.broken_cases import BROKEN, Broken, both, cut, edit, remove

if TYPE_CHECKING:
    from collections.abc import Callable


def append(name: str, text: str) -> Callable[[Path], None]:
    """Add text at the end of a file."""

    def make(folder: Path) -> None:
        with (folder / name).open("a") as handle:
            handle.write(text)

    return make


def write(name: str, content: str | bytes) -> Callable[[Path], None]:
    """Write a file anew."""

    def make(folder: Path) -> None:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content if isinstance(content, bytes) else content.encode())

    return make


def float_recording(value: float) -> Callable[[Path], None]:
    """The recording as float32 with one sample that is no number."""

    def make(folder: Path) -> None:
        samples = np.fromfile(folder / "a_lfp.bin", "<i2").astype("<f4")
        samples[len(samples) // 2] = value
        samples.tofile(folder / "a_lfp.bin")
        edit("brain.toml", 'dtype = "int16"', 'dtype = "float32"')(folder)

    return make


def anchors(*rows: tuple[float, float]) -> Callable[[Path], None]:
    """Anchors in brain.toml."""
    return append(
        "brain.toml",
        "".join(f'\n[[anchor]]\npenetration = "A"\ntip_distance_um = {t}\ntrack_depth_um = {d}\n' for t, d in rows),
    )


HEAD = "penetration,shank,tip_distance_um,track_depth_um,sd_um,landmark,source,note\n"
SHANK_7 = "s0_um,s1_um,s2_um,shank\n900,900,900,7\n900,1900,900,7\n"
ANCHOR_OF_Z = '\n[[anchor]]\npenetration = "Z"\ntip_distance_um = 5\ntrack_depth_um = 9\n'
SECOND_A = '\n[[penetration]]\nname = "a"\nprobe = "probe_a.json"\n'
KNOWLEDGE = '\n[knowledge]\npath = "k.toml"\n'
BROKEN_INPUTS = (
    Broken("recording-truncated", cut("a_lfp.bin", 0.70003), ("a_lfp.bin",)),
    Broken("recording-empty", write("a_lfp.bin", b""), ("a_lfp.bin",)),
    Broken("recording-missing", remove("a_lfp.bin"), ("a_lfp.bin does not exist",)),
    Broken("recording-nan", float_recording(float("nan")), ("a_lfp.bin",)),
    Broken("recording-infinite", float_recording(float("inf")), ("a_lfp.bin",)),
    Broken("spikes-without-unit", edit("a_spikes.csv", "unit_id", "unit"), ("unit_id", "a_spikes.csv")),
    Broken("spikes-text-time", append("a_spikes.csv", "soon,1,300\n"), ("a_spikes.csv",)),
    Broken("spikes-negative-time", append("a_spikes.csv", "-4.0,1,300\n"), ("a_spikes.csv",)),
    Broken("spikes-not-a-table", write("a_spikes.csv", b"\x00\x01\x02"), ("a_spikes.csv",)),
    Broken("events-without-time", edit("a_events.csv", "time_s", "time"), ("time_s", "a_events.csv")),
    Broken("events-nan", append("a_events.csv", "nan,flash\n"), ("a_events.csv",)),
    Broken("exclude-backwards", append("a_exclude.csv", "5.0,4.0\n"), ("a_exclude.csv",)),
    Broken("points-one", write("a_points.csv", "s0_um,s1_um,s2_um\n1,2,3\n"), ("at least two",)),
    Broken("points-shank-unknown", write("a_points.csv", SHANK_7), ("shank 7",)),
    Broken("anchors-crossing", anchors((500, 2000), (900, 2300)), ("anchors cross", "500", "900")),
    Broken("anchors-same-contact", anchors((500, 2000), (500, 2300)), ("anchors cross",)),
    Broken("anchor-of-nobody", append("brain.toml", ANCHOR_OF_Z), ("no penetration 'Z'",)),
    Broken("anchors-file-text", write("out/anchors.csv", HEAD + "A,0,abc,100,40,,user,\n"), ("anchors.csv, line 2",)),
    Broken("anchors-file-binary", write("out/anchors.csv", b"\xff\xfe\x00\x01"), ("anchors.csv",)),
    Broken("toml-broken", append("brain.toml", "\n[penetration\n"), ("not valid TOML",)),
    Broken("toml-unknown-key", edit("brain.toml", "tip_offset_um", "tip_ofset_um"), ("did you mean 'tip_offset_um'",)),
    Broken("toml-no-atlas", edit("brain.toml", 'path = "atlas"', 'path = "atlass"'), ("atlass does not exist",)),
    Broken("toml-two-of-one-name", append("brain.toml", SECOND_A), ("named 'a'",)),
    Broken("steps-damaged", write(".leadline/steps.json", "{"), ("steps.json", "Delete it")),
    Broken("knowledge-broken", both(write("k.toml", "x = ["), append("brain.toml", KNOWLEDGE)), ("k.toml",)),
)  # fmt: skip

SMALL_BYTES = 60_000


def differences(case: Broken, good: Path, folder: Path) -> tuple[dict[str, bytes], list[str]]:
    """Files in which a spoilt copy differs from the good brain, and files that it lacks."""
    shutil.copytree(good, folder)
    case.make(folder)
    before, after = content(good), content(folder)
    changed = {name: data for name, data in after.items() if before.get(name) != data}
    return changed, [name for name in before if name not in after]


def content(folder: Path) -> dict[str, bytes]:
    """Every file below a folder."""
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def main(target: Path) -> None:
    """Write what makes each small case broken to ``target/NAME``: lay it over the good brain to have it whole."""
    with TemporaryDirectory() as scratch:
        good = Path(scratch) / "good"
        write_good_brain(good)
        for number, case in enumerate((*BROKEN, *BROKEN_INPUTS)):
            changed, gone = differences(case, good, Path(scratch) / str(number))
            if sum(map(len, changed.values())) > SMALL_BYTES:
                continue
            for name, data in changed.items():
                write(f"{case.name}/{name}", data)(target)
            told = f"leadline run must end with exit code 2 and say: {' … '.join(case.words)}\n"
            write(f"{case.name}/EXPECTED", told + "".join(f"without {name}\n" for name in gone))(target)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
