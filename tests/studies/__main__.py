"""``make study``: how well the stages do on many invented brains; tables on standard output, figures in docs/."""

import subprocess
import sys
from pathlib import Path

STUDIES = ("registration", "tracing", "inference", "calibration", "silence")


def main() -> int:
    """Run the studies named on the command line, or all."""
    worst = 0
    for name in sys.argv[1:] or STUDIES:
        sys.stdout.write(f"== {name}\n")
        sys.stdout.flush()
        worst = max(worst, subprocess.call([sys.executable, Path(__file__).with_name(f"{name}.py")]))
    return worst


if __name__ == "__main__":
    sys.exit(main())
