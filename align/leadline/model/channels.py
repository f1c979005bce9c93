"""The channel table: its columns, in order."""

from __future__ import annotations

CHANNEL_COLUMNS = (
    "brain",
    "penetration",
    "shank",
    "channel",
    "contact_id",
    "x_um",
    "y_um",
    "tip_distance_um",
    "track_depth_um",
    "track_depth_sd_um",
    "ap_um",
    "dv_um",
    "ml_um",
    "region_id",
    "region",
    "region_name",
    "coarse_region",
    "layer",
    "tissue",
    "p_region",
    "p_coarse",
    "in_brain",
    "boundary_um",
    "basis",
)
STEREO_COLUMNS = ("stereo_ap_mm", "stereo_ml_mm", "stereo_dv_mm")
POSTERIOR_COLUMNS = ("penetration", "channel", "region_id", "region", "probability")
TRACK_COLUMNS = (
    "penetration",
    "shank",
    "order",
    "s0_um",
    "s1_um",
    "s2_um",
    "ap_um",
    "dv_um",
    "ml_um",
    "track_depth_um",
    "radius_um",
)
BASES = ("histology", "physiology", "between", "beyond")
MIN_PROBABILITY = 0.001
