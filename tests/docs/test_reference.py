"""The API reference can be built from the docstrings, and has a page for every public module."""

import pkgutil
from pathlib import Path

import pdoc

import leadline


def test_the_reference_has_a_page_for_every_public_module(tmp_path):
    pdoc.render.configure(docformat="numpy", show_source=False)
    pdoc.pdoc("leadline", "!leadline.demo", output_directory=tmp_path)
    public = {
        m.name
        for m in pkgutil.walk_packages(leadline.__path__, "leadline.")
        if not any(part.startswith("_") for part in m.name.split(".")) and not m.name.startswith("leadline.demo")
    }
    built = {".".join(p.relative_to(tmp_path).with_suffix("").parts) for p in tmp_path.rglob("*.html")}
    assert public <= built
    text = Path(tmp_path / "leadline.html").read_text()
    assert "open_brain" in text
    assert "Read a" in text
