"""An NWB file of the tiny brain's recording, its electrodes in another order than the probe's contacts."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
from tests.good_brain import N_CONTACTS, N_TRACES, SAMPLING_HZ

ORDER = np.random.default_rng(11).permutation(N_CONTACTS)
UV_PER_BIT = 0.5


def write_nwb(
    folder: Path,
    *,
    group: str = "A",
    order: np.ndarray = ORDER,
    places: bool = True,
    names: str = "",
    start_s: float = 0.0,
    compress: bool = False,
) -> Path:
    """Write ``folder/session.nwb`` from the tiny brain's flat files.

    ``places`` : with ``rel_x, rel_y``. ``names`` : a column of contact ids. A second group, 'other', has three
    electrodes that were located by hand.
    """
    from pynwb import NWBHDF5IO, H5DataIO, NWBFile
    from pynwb.ecephys import LFP, ElectricalSeries
    from pynwb.file import Subject

    nwb = NWBFile(
        session_description="An invented session",
        identifier="tiny-01-session-1",
        session_start_time=datetime(2026, 3, 2, 9, 30, tzinfo=UTC),
        experimenter="Doe, Jane",
        experiment_description="An invented experiment",
        institution="Nowhere",
        keywords=["invented"],
    )
    nwb.subject = Subject(subject_id="tiny-01", species="Mus musculus", sex="F", age="P90D", description="invented")
    device = nwb.create_device(name="probe", description="An invented probe")
    mine = nwb.create_electrode_group(group, description="Shank", location="unknown", device=device)
    other = nwb.create_electrode_group("other", description="Another shank", location="root", device=device)
    if names:
        nwb.add_electrode_column(name=names, description="Which contact it is")
    for k in order:
        place = {"rel_x": 16.0 * (k % 2), "rel_y": 50.0 * k} if places else {}
        nwb.add_electrode(location="root", group=mine, **place, **({names: f"c{k}"} if names else {}))
    for k in range(3):
        place = {"rel_x": 0.0, "rel_y": 50.0 * k} if places else {}
        nwb.add_electrode(location="CA1", group=other, **place, **({names: f"o{k}"} if names else {}))
    raw = np.fromfile(folder / "a_lfp.bin", "<i2").reshape(-1, N_TRACES)[:, order]
    region = nwb.create_electrode_table_region(list(range(len(order))), "Every electrode of the group")
    data = H5DataIO(raw, compression="gzip", chunks=(5000, 16)) if compress else raw
    series = ElectricalSeries(
        name="lfp", data=data, electrodes=region, rate=SAMPLING_HZ, starting_time=start_s,
        conversion=UV_PER_BIT * 1e-6, description="LFP",
    )  # fmt: skip
    nwb.create_processing_module("ecephys", "LFP").add(LFP(electrical_series=series))
    _add_events(nwb, folder, start_s)
    _add_units(nwb, folder, order, start_s)
    path = folder / "session.nwb"
    with NWBHDF5IO(str(path), "w") as io:
        io.write(nwb)
    return path


def _add_events(nwb, folder: Path, start_s: float) -> None:
    nwb.add_trial_column(name="kind", description="What was shown")
    for row in pd.read_csv(folder / "a_events.csv").itertuples():
        nwb.add_trial(start_time=row.time_s + start_s, stop_time=row.time_s + start_s + 0.1, kind=row.kind)
    for row in pd.read_csv(folder / "a_exclude.csv").itertuples():
        nwb.add_invalid_time_interval(start_time=row.start_s + start_s, stop_time=row.stop_s + start_s)


def _add_units(nwb, folder: Path, order: np.ndarray, start_s: float) -> None:
    spikes = pd.read_csv(folder / "a_spikes.csv")
    nwb.add_unit_column(name="peak_channel_id", description="Id of the electrode where the unit is largest")
    for unit in range(12):
        times = spikes.loc[spikes["unit_id"] == f"u{unit}", "time_s"].to_numpy()
        for home in np.flatnonzero(order == home_contact(unit)):
            nwb.add_unit(id=unit, spike_times=times + start_s, peak_channel_id=int(home))


def home_contact(unit: int) -> int:
    """The contact nearest to an invented unit (130 um apart, from the tip's contact on)."""
    return int(np.rint(130 * unit / 50))
