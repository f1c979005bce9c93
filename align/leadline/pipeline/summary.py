"""A finished run in a few numbers: what was done, and of every penetration where its channels lie."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from leadline.model.brain import Brain
    from leadline.pipeline.run import Summary


def summary_json(brain: Brain, summary: Summary, until: str = "locate") -> dict[str, Any]:
    """What ``--json`` says of one brain."""
    return {
        "brain": summary.brain,
        "out": str(brain.out),
        "done": list(summary.done),
        "skipped": list(summary.skipped),
        "warnings": [{"step": s, "warning": w} for s, w in summary.warnings],
        "penetrations": penetration_rows(brain) if until == "locate" else [],
    }


def penetration_rows(brain: Brain) -> list[dict[str, Any]]:
    """Of every penetration: channels, how many lie in the brain, how sure that is, and the regions from the surface."""
    import pandas as pd

    table = pd.read_csv(brain.out / "channels.csv", dtype={"penetration": str}, keep_default_na=False)
    rows = []
    for name, part in table.groupby("penetration", sort=False):
        inside = part[part["in_brain"].astype(str) == "True"].sort_values("tip_distance_um", ascending=False)
        sd = pd.to_numeric(part["track_depth_sd_um"]).median()
        sure = pd.to_numeric(part["p_region"]).median()
        rows.append(
            {
                "penetration": str(name),
                "channels": len(part),
                "in_brain": len(inside),
                "depth_sd_um": None if pd.isna(sd) else round(float(sd), 1),
                "p_region": None if pd.isna(sure) else round(float(sure), 2),
                "regions": list(dict.fromkeys(inside["coarse_region"])),
            }
        )
    return rows
