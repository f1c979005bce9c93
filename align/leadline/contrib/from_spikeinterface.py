"""Write a Leadline recording folder from any recording and sorting that SpikeInterface can open.

Run it in the environment where SpikeInterface lives: it needs only numpy, SpikeInterface and, for recordings faster
than LFP, scipy (which SpikeInterface does not bring by itself); not Leadline. Copy the file there, or print where it is
with::

    python -c "import leadline.contrib.from_spikeinterface as m; print(m.__file__)"

From a script, with a recording and a sorting that you have opened as you always do::

    from from_spikeinterface import write_recording_folder
    write_recording_folder(recording, "for_leadline", sorting=sorting, name="A")

or from a shell, with folders that SpikeInterface saved (``recording.save(folder=...)``)::

    python from_spikeinterface.py RECORDING OUT --sorting SORTING --name A

The folder holds ``probe.json``, ``lfp.bin`` (float32 microvolts, resampled to about 2500 Hz where faster),
``spikes.csv``, ``units.csv`` and ``penetration.toml``, the lines to paste into ``brain.toml``.
"""

from __future__ import annotations

import argparse
import csv
import json
from pathlib import Path
from typing import Any

import numpy as np

LFP_HZ = 2500.0
CHUNK_S = 10.0
TOML = """\
[[penetration]]
name = {name}
probe = "probe.json"
tip_offset_um = 0.0            # write the distance from the tip to y = 0 of probe.json
{unit_table}
  [[penetration.recording]]
  lfp = "lfp.bin"
  sampling_hz = {sampling_hz!r}
  n_channels = {n_channels}
  dtype = "float32"
  uv_per_bit = 1.0
{spikes}"""


def write_recording_folder(
    recording: Any, folder: str | Path, *, sorting: Any = None, name: str = "A", lfp_hz: float = LFP_HZ
) -> Path:
    """Write the folder; returns it.

    Parameters
    ----------
    recording : a SpikeInterface recording with a probe and gains to microvolts, of one segment.
    sorting : its sorting, or None. A unit is put at the channel that its property ``peak_channel_id``,
        ``extremum_channel`` or ``ch`` names, or else where its mean waveform is largest in the recording.
    lfp_hz : the traces are resampled to this rate where they are faster by a half and more.

    Raises
    ------
    ValueError : the recording has no probe, several segments or no gains, or the folder holds something already.
    """
    folder = Path(folder)
    if folder.exists() and any(folder.iterdir()):
        raise ValueError(f"{folder} holds files already; name an empty folder")
    if recording.get_num_segments() != 1:
        raise ValueError("the recording has several segments; choose one with recording.select_segments([0])")
    if not recording.has_probe():
        raise ValueError("the recording has no probe; set it with recording.set_probe(...)")
    if not recording.has_scaleable_traces():
        raise ValueError("the recording has no gains to microvolts; set them with recording.set_channel_gains(...)")
    slow = _resampled(recording, lfp_hz)
    folder.mkdir(parents=True, exist_ok=True)
    sampling_hz = _write_traces(slow, folder / "lfp.bin")
    positions = _write_probe(recording, folder / "probe.json")
    if sorting is not None:
        homes = _home_channels(recording, sorting)
        _write_spikes(sorting, homes, folder / "spikes.csv")
        _write_units(sorting, folder / "units.csv")
    _write_toml(folder, name, sampling_hz, len(positions), sorting is not None)
    return folder


def _resampled(recording: Any, lfp_hz: float) -> Any:
    """The recording at about ``lfp_hz`` where it is faster by a half and more, lazily."""
    if float(recording.get_sampling_frequency()) < 1.5 * lfp_hz:
        return recording
    from spikeinterface.preprocessing import resample

    try:
        return resample(recording, round(lfp_hz))  # filters against aliasing by itself
    except ModuleNotFoundError as error:
        raise ValueError(f"SpikeInterface cannot resample without {error.name}; pip install {error.name}") from error


def _write_traces(recording: Any, path: Path) -> float:
    """Write float32 microvolts, time-major, chunk by chunk; returns their rate."""
    sampling_hz = float(recording.get_sampling_frequency())
    step = max(1, round(CHUNK_S * sampling_hz))
    with path.open("wb") as handle:
        for start in range(0, recording.get_num_samples(), step):
            stop = min(start + step, recording.get_num_samples())
            _microvolts(recording, start, stop).astype("<f4").tofile(handle)
    return sampling_hz


def _microvolts(recording: Any, start: int, stop: int) -> np.ndarray:
    """Samples in microvolts; the keyword changed its name between SpikeInterface versions."""
    try:
        return np.asarray(recording.get_traces(start_frame=start, end_frame=stop, return_in_uV=True))
    except TypeError:
        return np.asarray(recording.get_traces(start_frame=start, end_frame=stop, return_scaled=True))


def _write_probe(recording: Any, path: Path) -> np.ndarray:
    """Write the contacts as a probeinterface file, wired in the order of the traces."""
    positions = np.asarray(recording.get_channel_locations(), float)
    if positions.shape[1] != 2:
        raise ValueError("the probe is three-dimensional; give it in its own plane (x across, y up the shank)")
    groups = [str(g) for g in recording.get_channel_groups()]
    probe = {
        "ndim": 2,
        "si_units": "um",
        "annotations": {"model_name": "", "manufacturer": ""},
        "contact_positions": positions.tolist(),
        "contact_plane_axes": [[[1.0, 0.0], [0.0, 1.0]]] * len(positions),
        "contact_shapes": ["circle"] * len(positions),
        "contact_shape_params": [{"radius": 6.0}] * len(positions),
        "contact_ids": [str(i) for i in recording.channel_ids],
        "shank_ids": groups,
        "device_channel_indices": list(range(len(positions))),
    }
    content = {"specification": "probeinterface", "version": "0.3.0", "probes": [probe]}
    path.write_text(json.dumps(content, indent=1), encoding="utf-8")
    return positions


def _home_channels(recording: Any, sorting: Any) -> dict[Any, int]:
    """Trace of the channel where each unit is largest."""
    index = {str(channel): k for k, channel in enumerate(recording.channel_ids)}
    for name in ("peak_channel_id", "extremum_channel", "ch"):
        values = sorting.get_property(name)
        if values is not None and all(str(v) in index for v in values):
            return {unit: index[str(v)] for unit, v in zip(sorting.unit_ids, values, strict=True)}
    return {unit: _largest(recording, sorting, unit) for unit in sorting.unit_ids}


def _largest(recording: Any, sorting: Any, unit: Any, spikes: int = 200) -> int:
    """Channel where the mean of up to 200 of a unit's waveforms is largest from peak to peak."""
    half = max(1, round(0.001 * recording.get_sampling_frequency()))
    frames = np.asarray(sorting.get_unit_spike_train(unit))
    frames = frames[(frames >= half) & (frames < recording.get_num_samples() - half)]
    if not len(frames):
        raise ValueError(f"unit {unit} has no spikes inside the recording; leave it out")
    frames = frames[np.linspace(0, len(frames) - 1, min(spikes, len(frames))).astype(int)]
    mean = sum(_microvolts(recording, int(f) - half, int(f) + half).astype(float) for f in frames)
    return int(np.ptp(np.asarray(mean), axis=0).argmax())


def _write_spikes(sorting: Any, homes: dict[Any, int], path: Path) -> None:
    rate = float(sorting.get_sampling_frequency())
    rows = [
        (frame / rate, unit, homes[unit]) for unit in sorting.unit_ids for frame in sorting.get_unit_spike_train(unit)
    ]
    rows.sort(key=lambda row: row[0])
    with path.open("w", newline="", encoding="utf-8") as handle:
        table = csv.writer(handle, lineterminator="\n")
        table.writerow(("time_s", "unit_id", "channel"))
        table.writerows((f"{time:.6f}", unit, channel) for time, unit, channel in rows)


def _write_units(sorting: Any, path: Path) -> None:
    """The sorting's own properties of its units, those that are one number or word each."""
    known = {name: sorting.get_property(name) for name in sorting.get_property_keys()}
    plain = {name: values for name, values in known.items() if np.ndim(values) == 1 and name != "unit_id"}
    with path.open("w", newline="", encoding="utf-8") as handle:
        table = csv.writer(handle, lineterminator="\n")
        table.writerow(("unit_id", *plain))
        for k, unit in enumerate(sorting.unit_ids):
            table.writerow((unit, *(values[k] for values in plain.values())))


def _write_toml(folder: Path, name: str, sampling_hz: float, n_channels: int, has_units: bool) -> None:
    text = TOML.format(
        name=json.dumps(name),
        sampling_hz=sampling_hz,
        n_channels=n_channels,
        unit_table='unit_table = "units.csv"\n' if has_units else "",
        spikes='  spikes = "spikes.csv"\n' if has_units else "",
    )
    for file in ("probe.json", "units.csv", "lfp.bin", "spikes.csv"):
        text = text.replace(f'"{file}"', json.dumps(f"{folder.name}/{file}"))
    (folder / "penetration.toml").write_text(text, encoding="utf-8")


def main() -> None:
    """Load folders that SpikeInterface saved and write the Leadline folder."""
    parser = argparse.ArgumentParser(description="Write a Leadline recording folder from SpikeInterface folders.")
    parser.add_argument("recording", help="a folder made by recording.save(folder=...)")
    parser.add_argument("out", help="the folder to write")
    parser.add_argument("--sorting", help="a folder made by sorting.save(folder=...)")
    parser.add_argument("--name", default="A", help="name of the penetration")
    given = parser.parse_args()
    from spikeinterface.core import load

    sorting = load(given.sorting) if given.sorting else None
    folder = write_recording_folder(load(given.recording), given.out, sorting=sorting, name=given.name)
    print(f"written: {folder}; paste {folder / 'penetration.toml'} into brain.toml")  # noqa: T201


if __name__ == "__main__":
    main()
