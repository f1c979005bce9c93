"""What the NWB community's own checkers say of an exported file.

pynwb's validator holds the schema, nwbinspector the best practices of the archive. Both are run on the source and on
the copy; the copy may add nothing of weight.
"""

import json

import pytest
from nwbinspector import Importance, inspect_nwbfile
from probeinterface import read_probeinterface
from pynwb import validate
from tests.finished_brain import write_finished_brain
from tests.made_nwb import write_nwb

from leadline.pipeline.export import export_bids, export_nwb, export_probeinterface


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    return write_finished_brain(tmp_path_factory.mktemp("validators"))


def test_an_exported_file_is_valid_and_adds_no_complaint_of_weight(brain):
    source = write_nwb(brain.folder)
    export_nwb(brain, source, brain.folder / "out.nwb", groups={})
    assert validate(path=str(brain.folder / "out.nwb")) == []
    heavy = []
    for path in (source, brain.folder / "out.nwb"):
        found = list(inspect_nwbfile(nwbfile_path=str(path)))
        assert not [m for m in found if m.importance in (Importance.CRITICAL, Importance.ERROR)]
        heavy.append({(m.check_function_name, m.object_name) for m in found if m.importance.value >= 2})
    # The tiny atlas is invented, so its acronyms are no terms of the mouse ontology: that alone may be new.
    new = {name for name, _ in heavy[1] - heavy[0]}
    assert all(name.startswith("check_electrodes_location_") for name in new)
    assert len(new) <= 1


def test_an_annotated_probe_file_is_one_to_probeinterface(brain, tmp_path):
    import pandas as pd

    (path,) = export_probeinterface(brain, tmp_path)
    probe = read_probeinterface(path).probes[0]
    table = pd.read_csv(brain.out / "channels.csv", keep_default_na=False).set_index("contact_id")
    table = table.loc[list(probe.contact_ids)]
    assert probe.contact_annotations["brain_area"].tolist() == table["region"].tolist()
    assert probe.contact_annotations["ap_um"].tolist() == table["ap_um"].tolist()
    assert probe.contact_annotations["p_region"].tolist() == table["p_region"].tolist()
    before = json.loads((brain.folder / "probe_a.json").read_text())["probes"][0]
    after = json.loads(path.read_text())["probes"][0]
    assert {k: v for k, v in after.items() if "annotations" not in k} == {
        k: v for k, v in before.items() if "annotations" not in k
    }


def test_contacts_without_a_place_have_none_in_any_format(tmp_path):
    import pandas as pd

    brain = write_finished_brain(tmp_path)
    table = pd.read_parquet(brain.out / "channels.parquet")
    lost = table["channel"] < 4
    table.loc[lost, "region"] = "not located"
    table.loc[lost, ["ap_um", "dv_um", "ml_um", "p_region"]] = None
    table.to_parquet(brain.out / "channels.parquet")
    (path,) = export_probeinterface(brain, tmp_path / "p")
    notes = json.loads(path.read_text())["probes"][0]["contact_annotations"]
    assert notes["brain_area"][:5] == ["", "", "", "", "CA1p"]
    assert notes["ap_um"][:4] == [None] * 4
    tsv = pd.read_csv(export_bids(brain, tmp_path / "b")[0], sep="\t", keep_default_na=False)
    assert tsv.loc[lost, ["x", "location", "probability"]].to_numpy().tolist() == [["n/a"] * 3] * 4


def test_an_annotated_probe_file_fits_the_published_schema(brain, tmp_path):
    """The JSON schema that probeinterface ships."""
    from importlib.resources import files

    import jsonschema

    schemas = [p for p in (files("probeinterface") / "schema").iterdir() if p.name.startswith("probe")]
    (path,) = export_probeinterface(brain, tmp_path)
    for schema in schemas:
        jsonschema.validate(json.loads(path.read_text()), json.loads(schema.read_text()))
    assert schemas


def test_bids_tables_are_those_of_the_proposal(brain, tmp_path):
    """What the models of nwb2bids 0.13 (electrodes, probes, coordinate system) ask for; atlas coordinates need the
    entity ``space``, without which x, y, z would be places on the probe."""
    import pandas as pd

    files = {str(p.relative_to(tmp_path / "sub-tiny01" / "ecephys")): p for p in export_bids(brain, tmp_path)}
    space = "sub-tiny01_space-Other"
    assert set(files) == {
        *(f"{space}_{n}" for n in ("electrodes.tsv", "electrodes.json", "coordsystem.json")),
        *(f"sub-tiny01_probes.{n}" for n in ("tsv", "json")),
    }
    table, probes = (
        pd.read_csv(files[f"{n}.tsv"], sep="\t", keep_default_na=False)
        for n in (f"{space}_electrodes", "sub-tiny01_probes")
    )
    assert list(table.columns[:7]) == ["name", "probe_name", "x", "y", "z", "impedance", "shank_id"]
    assert list(probes.columns[:2]) == ["probe_name", "type"]
    for name, columns in ((f"{space}_electrodes", table), ("sub-tiny01_probes", probes)):
        sidecar = json.loads(files[f"{name}.json"].read_text())
        assert all(sidecar[column]["Description"] for column in columns)
        assert (columns != "").all(axis=None)
    assert table["name"].is_unique
    assert set(table["probe_name"]) == set(probes["probe_name"])
    channels = pd.read_csv(brain.out / "channels.csv")
    assert table["x"].tolist() == channels["ap_um"].tolist()
    assert (table["layer"] == "n/a").sum() == channels["layer"].isna().sum()
    system = json.loads(files[f"{space}_coordsystem.json"].read_text())
    assert system["MicroephysCoordinateUnits"] in ("m", "mm", "cm", "um", "n/a")
    assert system["MicroephysCoordinateSystem"] == "Other"
    assert system["MicroephysCoordinateSystemDescription"]
