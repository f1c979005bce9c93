import nibabel as nib
import nrrd
import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from leadline.base.errors import LeadlineError
from leadline.io.atlases import label_counts, read_atlas, write_atlas
from leadline.io.structure_tables import read_foreign_table, read_structures
from leadline.model.atlas import Structure
from leadline.model.frames import ALL_CODES, from_pir
from leadline.pipeline.atlas_import import check_atlas, import_atlas, load_atlas

BIG, SMALL = 2**32 - 1, 16777217
ROWS = (
    Structure(997, "root", "root", None),
    Structure(BIG, "VIP1", "Primary visual area, layer 1", 997, "#112233", "1", True, "grey"),
    Structure(SMALL, "CCB", "Corpus callosum", 997, "#aabbcc", "", False, "white"),
)
LABELS = np.zeros((6, 5, 7), np.uint32)
LABELS[1:5, 1:4, 1:6] = BIG
LABELS[3:5, 2:4, 3:6] = SMALL
TEMPLATE = (LABELS % 251).astype(np.uint16)


@pytest.fixture
def folder(tmp_path):
    write_atlas(
        tmp_path / "atlas", name="Tiny", citation="none", licence="CC0", labels=LABELS, template=TEMPLATE,
        voxel_um=(50, 40, 30), rows=ROWS, bregma_um=(1, 2, 3),
    )  # fmt: skip
    return tmp_path / "atlas"


def edit(folder, old, new, file="atlas.toml"):
    text = (folder / file).read_text()
    assert old in text
    (folder / file).write_text(text.replace(old, new))


def refuses(folder, *words):
    with pytest.raises(LeadlineError) as caught:
        read_atlas(folder)
    for word in words:
        assert word in str(caught.value)


def test_an_atlas_that_is_written_is_read_back_the_same(folder):
    atlas = read_atlas(folder)
    np.testing.assert_array_equal(atlas.labels.data, LABELS)
    np.testing.assert_array_equal(atlas.template.data, TEMPLATE)
    assert atlas.labels.data.dtype == np.uint32
    assert atlas.voxel_um.tolist() == [50, 40, 30]
    assert atlas.structures.rows == ROWS
    assert atlas.bregma_um.tolist() == [1, 2, 3]
    assert (atlas.name, atlas.citation, atlas.licence) == ("Tiny", "none", "CC0")


@pytest.mark.parametrize("code", ALL_CODES)
def test_every_orientation_is_laid_out_as_pir(folder, code):
    stored = np.ascontiguousarray(from_pir(LABELS, code))
    sizes = dict(zip("PIR", (50.0, 40.0, 30.0), strict=True))
    sizes |= {"A": sizes["P"], "S": sizes["I"], "L": sizes["R"]}
    voxel = [sizes[letter] for letter in code]
    tifffile.imwrite(folder / "labels.tif", stored)
    tifffile.imwrite(folder / "template.tif", from_pir(TEMPLATE, code))
    edit(folder, "labels.nrrd", "labels.tif")
    edit(folder, "template.nrrd", "template.tif")
    edit(folder, 'orientation = "PIR"', f'orientation = "{code}"')
    edit(folder, (folder / "atlas.toml").read_text().split("voxel_um = [")[1].split("]")[0], str(voxel)[1:-1])
    atlas = read_atlas(folder)
    np.testing.assert_array_equal(atlas.labels.data, LABELS)
    np.testing.assert_array_equal(atlas.template.data, TEMPLATE)
    assert atlas.voxel_um.tolist() == [50, 40, 30]


def put(folder, array, file="labels.nrrd", **changes):
    _, header = nrrd.read(str(folder / file))
    for key in ("type", "sizes", "dimension", "endian", "kinds"):
        header.pop(key, None)
    nrrd.write(str(folder / file), array, header | changes)


def test_float_labels_pass_only_where_their_ids_are_exact(folder):
    small = np.where(LABELS == 0, 0, 997)
    put(folder, small.astype(np.float32))
    assert set(np.unique(read_atlas(folder).labels.data)) == {0, 997}
    put(folder, LABELS.astype(np.float64))
    np.testing.assert_array_equal(read_atlas(folder).labels.data, LABELS)
    put(folder, LABELS.astype(np.float32))
    refuses(folder, "stores label ids as float32, which cannot hold ids above 16777216 exactly")
    put(folder, small + 0.5)
    refuses(folder, "label ids that are not whole numbers")
    put(folder, np.where(LABELS == 0, np.nan, 997))
    refuses(folder, "label ids that are not whole numbers")


def test_labels_must_be_known_and_in_range(folder):
    lost = LABELS.copy()
    lost[1, 1, 1:4] = 555
    put(folder, lost)
    refuses(folder, "1 label has no row", "555 (3 voxels)")
    put(folder, LABELS.astype(np.int64) - 1)
    refuses(folder, "holds the label id -1")
    put(folder, LABELS.astype(np.uint64) + 1)
    refuses(folder, f"holds the label id {2**32}")
    put(folder, np.zeros_like(LABELS))
    refuses(folder, "every voxel is 0")


def test_labels_and_template_must_share_the_grid(folder):
    put(folder, TEMPLATE[:-1], "template.nrrd")
    refuses(folder, "labels and template differ")
    put(folder, np.full(LABELS.shape, np.nan), "template.nrrd")
    refuses(folder, "not finite")
    put(folder, np.ones(LABELS.shape), "template.nrrd")
    refuses(folder, "every voxel is the same")


def test_file_and_atlas_toml_must_agree(folder):
    edit(folder, 'orientation = "PIR"', 'orientation = "AIR"')
    refuses(folder, "orientations disagree: the file says 'PIR', atlas.toml says 'AIR'")
    edit(folder, 'orientation = "AIR"\n', "")
    assert read_atlas(folder).labels.code == "PIR"
    edit(folder, "50.0", "60.0")
    refuses(folder, "voxel sizes disagree")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('name = "Tiny"\n', "", ("key 'name' is missing",)),
        ("citation", "citaton", ("unknown key 'citaton'", "Did you mean 'citation'?")),
        ('orientation = "PIR"', 'orientation = "PIP"', ("not a three-letter code",)),
        ('orientation = "PIR"', "orientation = 3", ("orientation is 3",)),
        ("3.0,\n]\n", '"x",\n]\n', ("bregma_um is",)),
        ("labels.nrrd", "gone.nrrd", ("gone.nrrd: is not there",)),
        ("structures.csv", "gone.csv", ("gone.csv: is not there",)),
        ("name =", "name", ("no valid TOML",)),
    ],
)
def test_faults_of_atlas_toml(folder, old, new, words):
    edit(folder, old, new)
    refuses(folder, *words)


def test_a_folder_without_atlas_toml(tmp_path):
    refuses(tmp_path, "holds no atlas.toml", "leadline atlas import")
    refuses(tmp_path / "gone", "the atlas folder is not there")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("id,acronym,name\n", "lacks the columns parent_id, colour"),
        ("id,acronym,name,parent_id,colour\n", "has no rows"),
        ("id,acronym,name,parent_id,colour\n-3,A,a,,\n", "line 2: id is '-3'"),
        ("id,acronym,name,parent_id,colour\n0,A,a,,\n", "id is '0'"),
        ("id,acronym,name,parent_id,colour\n4294967296,A,a,,\n", "id is '4294967296'"),
        ("id,acronym,name,parent_id,colour\n1,A,a,0,\n", "parent_id is '0'. Write .*empty at the root"),
        ("id,acronym,name,parent_id,colour\n1,A,a,,red\n", "colour is 'red'"),
        ("id,acronym,name,parent_id,colour\n1,,a,,\n", "the acronym is empty"),
        ("id,acronym,name,parent_id,colour\n1,A,a,,\n1,B,b,,\n", "id 1 has two rows"),
        ("id,acronym,name,parent_id,colour\n1,A,a,,\n2,A,b,,\n", "acronym 'A' names both id 1 and id 2"),
        ("id,acronym,name,parent_id,colour\n1,A,a,7,\n", "has parent 7, which has no row"),
        ("id,acronym,name,parent_id,colour\n1,A,a,2,\n2,B,b,1,\n", "is its own ancestor"),
        ("id,acronym,name,parent_id,colour,tissue\n1,A,a,,,gray\n", "tissue is 'gray'"),
        ("id,acronym,name,parent_id,colour,coarse\n1,A,a,,,maybe\n", "coarse is 'maybe'"),
    ],
)
def test_faults_of_the_structure_table(tmp_path, text, words):
    (tmp_path / "s.csv").write_text(text)
    with pytest.raises(LeadlineError, match=words):
        read_structures(tmp_path / "s.csv")


def test_the_structure_table_may_have_more_columns_and_a_byte_order_mark(tmp_path):
    text = "\ufeffid,acronym,name,parent_id,colour,layer,mine\n5,A,,,ABCDEF,2/3,x\n"
    (tmp_path / "s.csv").write_text(text, encoding="utf-8")
    structures, columns = read_structures(tmp_path / "s.csv")
    assert structures.rows == (Structure(5, "A", "A", None, "#abcdef", "2/3"),)
    assert columns == ("layer",)


@settings(deadline=None)
@given(arrays(np.uint32, (3, 4, 5), elements=st.sampled_from([0, 1, 2**24 + 1, 2**32 - 1])))
def test_voxels_are_counted_exactly(labels):
    ids, counts = np.unique(labels, return_counts=True)
    assert label_counts(labels) == dict(zip(ids.tolist(), counts.tolist(), strict=True))


def write_sources(tmp_path):
    for name, array in (("labels", LABELS), ("template", TEMPLATE)):
        image = nib.Nifti1Image(array, np.diag([0.05, 0.04, 0.03, 1]))
        image.header.set_xyzt_units("mm")
        nib.save(image, tmp_path / f"{name}.nii.gz")
    lines = "".join(f'{r.id};{r.acronym};"{r.name}";{r.parent_id or ""}\n' for r in ROWS)
    (tmp_path / "s.csv").write_text("id;acronym;name;parent_structure_id\n" + lines)
    return tmp_path / "labels.nii.gz", tmp_path / "template.nii.gz", tmp_path / "s.csv", tmp_path / "out"


def test_import_lays_out_as_pir_and_fills_layer_and_tissue(tmp_path):
    summary = import_atlas(*write_sources(tmp_path), name="Tiny", bregma_um=(1, 2, 3))
    atlas = read_atlas(tmp_path / "out")
    np.testing.assert_array_equal(atlas.labels.data, LABELS.transpose(1, 2, 0)[::-1, ::-1])
    assert atlas.voxel_um == pytest.approx([40, 30, 50])
    assert [(r.layer, r.tissue) for r in atlas.structures.rows] == [("", "grey"), ("1", "grey"), ("", "white")]
    assert summary["labels"] == 2
    assert summary["tissues"] == {"grey": 1, "white": 1}
    checked = check_atlas(tmp_path / "out")
    assert {k: v for k, v in checked.items() if k != "notes"} == {k: v for k, v in summary.items() if k != "notes"}


def test_a_refused_import_writes_nothing(tmp_path):
    sources = write_sources(tmp_path)
    (tmp_path / "s.csv").write_text("id,name\n997,root\n")
    with pytest.raises(LeadlineError, match=f"2 labels have no row .*{SMALL}.*{BIG}"):
        import_atlas(*sources, name="Tiny")
    with pytest.raises(LeadlineError, match=r"disagree.*the command says"):
        import_atlas(*sources, name="Tiny", voxel_um=(1, 2, 3))
    assert not (tmp_path / "out").exists()


def test_an_atlas_never_replaces_other_files(tmp_path, folder):
    sources = write_sources(tmp_path)
    with pytest.raises(LeadlineError, match=r"holds other files \(atlas, labels.nii.gz, s.csv, ...\)"):
        import_atlas(*sources[:3], tmp_path, name="Tiny")
    import_atlas(*sources[:3], folder, name="Another")
    assert read_atlas(folder).name == "Another"
    with pytest.raises(LeadlineError, match="holds the files to import"):
        import_atlas(folder / "labels.nrrd", folder / "template.nrrd", folder / "structures.csv", folder, name="Tiny")
    (folder / "notes.txt").write_text("by hand")
    with pytest.raises(LeadlineError, match=r"notes\.txt"):
        import_atlas(*sources[:3], folder, name="Tiny")
    assert (folder / "notes.txt").read_text() == "by hand"


def test_columns_that_the_folder_lacks_are_derived(folder):
    edit(folder, "layer,coarse,tissue", "x,y,z", "structures.csv")
    assert {r.tissue for r in read_atlas(folder).structures.rows} == {"grey"}
    derived = load_atlas(folder).structures
    assert derived[BIG].layer == "1"
    assert derived[SMALL].tissue == "white"


def test_foreign_tables(tmp_path):
    (tmp_path / "a.json").write_text('[{"id": 1}]')
    assert read_foreign_table(tmp_path / "a.json") == [{"id": 1}]
    for delimiter in ",;\t":
        (tmp_path / "a.csv").write_text(f'id{delimiter}name\n1{delimiter}"a{delimiter} b"\n')
        assert read_foreign_table(tmp_path / "a.csv") == [{"id": "1", "name": f"a{delimiter} b"}]
    (tmp_path / "b.json").write_text("{")
    with pytest.raises(LeadlineError, match="neither JSON nor a CSV"):
        read_foreign_table(tmp_path / "b.json")
    with pytest.raises(LeadlineError, match="not there"):
        read_foreign_table(tmp_path / "gone.csv")
