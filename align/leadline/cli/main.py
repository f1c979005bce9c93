"""``leadline``: parses, calls, prints. 0 done, 2 the user's input is wrong, 1 anything else."""

from __future__ import annotations

import sys
import traceback

import typer

from leadline.base.errors import Faults, LeadlineError
from leadline.base.progress import Cancelled
from leadline.cli import atlas, brains, compare, demo, export, ingest, learn, points, report, units, view
from leadline.cli.terminal import err

app = typer.Typer(
    name="leadline",
    help="In which brain region and layer did every channel of a silicon probe sit? Research use only.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)
demo.add_to(app)
app.add_typer(atlas.app, name="atlas", help="Build or check an atlas folder.")
brains.add_to(app)
ingest.add_to(app)
points.add_to(app)
learn.add_to(app)
units.add_to(app)
report.add_to(app)
export.add_to(app)
compare.add_to(app)
view.add_to(app)


def main() -> None:
    """Run the command line; the only place where errors become exit codes."""
    try:
        app()
    except Faults as error:
        err(f"leadline: {len(error.faults)} things are wrong")
        for fault in error.faults:
            err(f"- {fault}")
        sys.exit(2)
    except LeadlineError as error:
        err(f"leadline: {error}")
        sys.exit(2)
    except (KeyboardInterrupt, Cancelled):
        err("leadline: stopped; finished stages are kept, run again to go on")
        sys.exit(1)
    except OSError as error:
        err(f"leadline: {error.strerror or error}{': ' + str(error.filename) if error.filename else ''}")
        sys.exit(1)
    except Exception:  # noqa: BLE001 - our own fault: shown whole, so that it can be reported
        traceback.print_exc()
        err("leadline: this is a fault of Leadline; please report the lines above")
        sys.exit(1)
