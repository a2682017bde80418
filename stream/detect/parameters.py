"""The settings of detection as one plain record, in the units of the kernels."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.config import Settings

PARAMETERS = np.dtype(
    [
        ("max_speed_mps", np.float64),
        ("jump_slack_m", np.float64),
        ("max_gap_us", np.int64),
        ("dwell_us", np.int64),
        ("max_passage_us", np.int64),
        ("dwell_radius_m", np.float64),
        ("sigma_m", np.float64),
        ("beta_m", np.float64),
        ("beta_share", np.float64),
        ("radius_m", np.float64),
        ("keep_m", np.float64),
        ("anchor_m", np.float64),
        ("back_m", np.float64),
        ("reverse_cost", np.float64),
        ("prune", np.float64),
        ("reach_m", np.float64),
        ("drive_share", np.float64),
        ("slow_mps", np.float64),
        ("queue_mps", np.float64),
        ("queue_look_m", np.float64),
    ],
    align=True,
)


def parameters(settings: Settings) -> NDArray[Any]:
    """Turn the settings into the record that kernels read.

    Returns
    -------
    structured[1] of `PARAMETERS`
    """
    clean, trips, follow, passages = settings.clean, settings.trips, settings.follow, settings.passages
    out = np.zeros(1, PARAMETERS)
    out["max_speed_mps"] = clean.max_speed_kmh / 3.6
    out["jump_slack_m"] = clean.jump_slack_m
    out["max_gap_us"] = round(trips.max_gap_s * 1e6)
    out["dwell_us"] = round(trips.dwell_s * 1e6)
    out["max_passage_us"] = round(trips.max_passage_s * 1e6)
    out["dwell_radius_m"] = trips.dwell_radius_m
    for name in (
        "sigma_m",
        "beta_m",
        "beta_share",
        "radius_m",
        "keep_m",
        "anchor_m",
        "back_m",
        "reverse_cost",
    ):
        out[name] = getattr(follow, name)
    out["prune"] = follow.prune
    out["reach_m"] = follow.route_reach_m
    out["drive_share"] = follow.drive_share
    out["slow_mps"] = passages.slow_kmh / 3.6
    out["queue_mps"] = passages.queue_kmh / 3.6
    out["queue_look_m"] = passages.queue_look_m
    return out
