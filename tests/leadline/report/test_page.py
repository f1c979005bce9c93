"""The page: whole, offline, escaped, small; and alive in a browser."""

import json
import re
import shutil
import subprocess
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from tests.finished_brain import registration, track, write_finished_brain
from typer.testing import CliRunner

from leadline.cli.main import app
from leadline.pipeline.bench import Bench
from leadline.pipeline.provenance import CAUTION
from leadline.report import page as page_module
from leadline.report.findings import gather
from leadline.report.page import fitting_rows, page, section_pictures
from leadline.report.planes import check_planes, grey, sampled

EVIL = "</script><img src=x onerror=alert(1)>&\"'"
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    brain = write_finished_brain(tmp_path_factory.mktemp("page"))
    toml = brain.atlas / "atlas.toml"
    toml.write_text(toml.read_text().replace('"Tiny atlas"', json.dumps("Tiny " + EVIL)))
    names = brain.atlas / "structures.csv"
    names.write_text(names.read_text().replace("Dentate gyrus", EVIL.replace('"', '""')))
    suggestions = brain.out / "suggestions.csv"
    suggestions.write_text(suggestions.read_text().replace("no spikes within 50 um", "<i>none</i>"))
    table = pd.read_parquet(brain.out / "channels.parquet")
    table.loc[table["region"] == "DGY", "region_name"] = EVIL
    table.to_parquet(brain.out / "channels.parquet")
    table.to_csv(brain.out / "channels.csv", index=False)
    return brain


@pytest.fixture(scope="module")
def text(brain):
    return page(gather(Bench(brain)))


class Tags(HTMLParser):
    """Counts elements, and keeps what they refer to."""

    def __init__(self):
        super().__init__()
        self.count, self.references, self.ids = {}, [], []

    def handle_starttag(self, tag, attrs):
        self.count[tag] = self.count.get(tag, 0) + 1
        found = dict(attrs)
        self.references += [found[key] for key in ("src", "href", "srcset", "data") if key in found]
        self.ids += [found["id"]] if "id" in found else []
        assert not any(key.startswith("on") for key in found), found


@pytest.fixture(scope="module")
def tags(text):
    parser = Tags()
    parser.feed(text)
    return parser


def test_the_page_stands_alone(text, tags):
    assert all(r.startswith(("data:image/", "#")) for r in tags.references)
    assert not re.search(r"(src|href)\s*=\s*[\"']?(https?:)?//|@import|url\(", text)
    assert {r[1:] for r in tags.references if r.startswith("#")} <= set(tags.ids)
    assert len(tags.ids) == len(set(tags.ids))
    assert len(text.encode()) < page_module.LARGEST_BYTES


def test_everything_from_the_users_files_is_escaped(text, tags):
    assert tags.count["script"] == 1
    assert "onerror=alert" in text  # it is there, as words
    assert "<img src=x" not in text
    assert "<b>warning</b>" not in text
    assert "<i>none</i>" not in text
    assert "a &lt;b&gt;warning&lt;/b&gt;" in text


def test_the_page_says_what_a_reader_looks_for(text, brain):
    table = pd.read_csv(brain.out / "channels.csv")
    assert text.count("<tr>") >= len(table)
    assert CAUTION in text
    for words in ("32 of 32", "CTX → FT → HPF", "ripple-band power peaks here", "How to cite", "Invented", "numpy"):
        assert words in text
    for channel in (0, 31):
        assert re.search(rf'<td class="n">{channel}</td>', text)


def test_the_stack_is_carried_to_the_atlas_grid(brain):
    """The stack is the template brightened: in atlas space the two agree voxel by voxel."""
    bench = Bench(brain)
    points = np.argwhere(bench.atlas.labels.array() > 0)[::97] * bench.atlas.voxel_um
    seen = sampled(bench.background.finest, registration().atlas_to_stack(points))
    model = sampled(bench.atlas.template, points)
    assert np.corrcoef(seen, model)[0, 1] > 0.9
    planes = check_planes(gather(bench))
    assert [p.title.split(",")[0] for p in planes] == ["coronal", "sagittal", "horizontal"]
    x, y = (float(v) for v in planes[0].tracks[0].split(" ")[0].split(","))
    assert (x, y) == pytest.approx((track().atlas_um[0, 2] / 100 + 0.5, track().atlas_um[0, 1] / 100 + 0.5), abs=0.06)


def test_grey_is_black_where_there_is_nothing():
    assert grey(np.array([[np.nan, 0.0], [5.0, 10.0]], np.float32))[0, 0] == 0
    assert grey(np.full((2, 2), np.nan, np.float32)).max() == 0


def test_many_shanks_become_pixels_rather_than_a_page_too_large(brain, monkeypatch):
    findings = gather(Bench(brain))
    shanks = [findings.shank("A", 0)]
    vectors = section_pictures(findings, shanks)
    assert all(uri.startswith("data:image/svg+xml") for uri in vectors)
    monkeypatch.setattr(page_module, "PICTURES_BYTES", 120_000)
    pixels = section_pictures(findings, shanks)
    assert all(uri.startswith("data:image/png") for uri in pixels)
    assert sum(map(len, pixels)) <= 120_000


def test_a_table_too_long_for_the_page_says_what_it_leaves_out(brain, monkeypatch):
    findings = gather(Bench(brain))
    columns, rows = fitting_rows(findings.channels, findings)
    assert (len(columns), len(rows)) == (len(page_module.TABLE_COLUMNS) + 1, 32)
    monkeypatch.setattr(page_module, "TABLE_BYTES", 9_000)
    columns, rows = fitting_rows(findings.channels, findings)
    assert (tuple(columns), len(rows)) == (page_module.CHIEF_COLUMNS, 32)
    monkeypatch.setattr(page_module, "TABLE_BYTES", 3_000)
    _, rows = fitting_rows(findings.channels, findings)
    assert 0 < sum(len(r) + 1 for r in rows) <= 3_000
    assert f"The first {len(rows)} of 32 channels" in page_module._channels(findings.channels, findings)


def test_layers_that_are_not_the_atlas_own_say_whence(brain):
    findings = gather(Bench(brain))
    table = findings.channels.assign(layer_source="fractions: mouse visual cortex")
    assert "layer_source" not in fitting_rows(findings.channels, findings)[0]
    columns, rows = fitting_rows(table, findings)
    assert columns[-1] == "layer_source"
    assert "fractions: mouse visual cortex" in rows[0]


def test_a_shank_without_a_track_is_told_so(tmp_path):
    from leadline.pipeline import products

    brain = write_finished_brain(tmp_path)
    products.write_tracks(brain, [], ["penetration A: no dye was found near its entry"])
    table = pd.read_parquet(brain.out / "channels.parquet")
    unlocated = table.assign(
        region="not located", region_name="not located", coarse_region="not located", layer="", basis=""
    )
    empty = "track_depth_um track_depth_sd_um ap_um dv_um ml_um region_id p_region p_coarse in_brain boundary_um"
    for column in empty.split():
        unlocated[column] = None
    unlocated.to_parquet(brain.out / "channels.parquet")
    pd.DataFrame(columns=["penetration", "channel", "region_id", "region", "probability"]).to_parquet(
        brain.out / "posterior.parquet"
    )
    text = page(gather(Bench(brain)))
    assert "Not located: penetration A: no dye was found near its entry" in text
    assert "0 of 32" in text


def test_the_command_writes_the_page_and_the_figures(tmp_path):
    brain = write_finished_brain(tmp_path)
    result = CliRunner().invoke(app, ["report", str(brain.file), "--figures", "--json"], catch_exceptions=False)
    said = json.loads(result.stdout)
    assert said["bytes"] == (brain.out / "report.html").stat().st_size < 5_000_000
    assert [p.rsplit("/", 1)[1] for p in said["figures"]] == ["section_A.svg", "section_A.pdf"]


SCRIPT = """
<script>
const click = (column) => document.querySelectorAll("#channel-table th button")[column].click();
const cells = (column) => [...document.querySelectorAll("#channel-table tbody tr")].filter((r) => !r.hidden)
  .map((r) => r.cells[column].textContent);
const heads = [...document.querySelectorAll("#channel-table th")].map((h) => h.textContent);
const said = {};
click(heads.indexOf("p_region")); said.up = cells(heads.indexOf("p_region")).map(Number);
click(heads.indexOf("p_region")); said.down = cells(heads.indexOf("p_region")).map(Number);
const find = document.getElementById("find");
find.value = "vip5 2/3"; find.dispatchEvent(new Event("input")); said.none = cells(0).length;
find.value = "vip5"; find.dispatchEvent(new Event("input")); said.vip5 = cells(heads.indexOf("region"));
said.count = document.getElementById("count").textContent;
const cut = document.getElementById("cut");
cut.value = 80; cut.dispatchEvent(new Event("input"));
said.cut = getComputedStyle(document.querySelector(".stack")).clipPath;
document.getElementById("lines").click();
said.lines = getComputedStyle(document.querySelector(".swipe path")).display;
said.wide = document.documentElement.scrollWidth <= document.documentElement.clientWidth;
window.addEventListener("load", () => {
  said.images = [...document.images].map((i) => i.naturalWidth > 0);
  document.body.innerHTML = "<pre id='said'></pre>";
  document.getElementById("said").textContent = JSON.stringify(said);
});
</script></body>"""


@pytest.mark.skipif(CHROMIUM is None, reason="no Chromium here: the page is not opened in a browser")
def test_the_page_is_alive_in_a_browser(text, tmp_path):
    (tmp_path / "page.html").write_text(text.replace("</body>", SCRIPT))
    quiet = ["--disable-quic", "--no-first-run", "--disable-background-networking", "--disable-component-update"]
    flags = ["--headless=new", "--no-sandbox", "--disable-gpu", "--disable-sync", *quiet]
    flags.append(f"--user-data-dir={tmp_path / 'profile'}")
    command = [CHROMIUM, *flags, "--virtual-time-budget=4000", "--dump-dom", (tmp_path / "page.html").as_uri()]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
    found = re.search(r'<pre id="said">(.*?)</pre>', done.stdout, re.S)
    assert found, done.stdout[-2000:]
    said = json.loads(found.group(1).replace("&gt;", ">").replace("&lt;", "<").replace("&amp;", "&"))
    assert said["up"] == sorted(said["up"])
    assert said["down"] == sorted(said["up"], reverse=True)
    assert len(said["up"]) == 32
    assert said["none"] == 0
    assert set(said["vip5"]) == {"VIP5"}
    assert said["count"] == f"{len(said['vip5'])} of 32 channels"
    assert "20%" in said["cut"]
    assert said["lines"] == "none"
    assert said["images"] == [True] * 7
    assert said["wide"]
