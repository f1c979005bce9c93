"""The pictures of the how-tos, from a finished brain: ``python -m tests.pictures BRAIN docs/pictures``."""

from __future__ import annotations

import shutil
import subprocess
import sys
from pathlib import Path
from tempfile import TemporaryDirectory

from leadline.io.brainfile import read_brain
from leadline.pipeline.bench import Bench
from leadline.pipeline.finished import located
from leadline.pipeline.units import write_units
from leadline.report.atlas_view import draw_value
from leadline.report.figures import draw_section
from leadline.report.findings import gather
from leadline.report.page import write_report
from leadline.report.style import save

WINDOW = "1280,1500"


def main(brain_folder: Path, out: Path) -> None:
    """Write ``section.png``, ``units.png`` and, where there is a Chromium, ``report.png``."""
    brain = located(read_brain(brain_folder))
    findings = gather(Bench(brain))
    first = next(key for key in findings.shanks() if findings.shank(*key).located)
    save(draw_section(findings, findings.shank(*first)), out / "section.png")
    save(draw_value(write_units(brain), "coarse_region", findings.bench.atlas), out / "units.png")
    browser = shutil.which("chromium") or shutil.which("google-chrome")
    if browser is None:
        sys.stderr.write("no Chromium here: report.png stays as it is\n")
        return
    with TemporaryDirectory() as folder:
        page = Path(folder) / "report.html"
        write_report(findings, page)
        flags = ["--headless=new", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", f"--user-data-dir={folder}/p"]
        shot = f"--screenshot={(out / 'report.png').absolute()}"
        subprocess.run([browser, *flags, f"--window-size={WINDOW}", shot, page.as_uri()], check=True, timeout=120)


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(sys.argv[2]))
