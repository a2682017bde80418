"""Measured passages against the drivers' own: which were seen, with the right arms, and how well timed."""

from typing import Any

import polars as pl

NEAR_US = 60_000_000  # a seen passage belongs to the true one of its junction that it overlaps within this


def between_pings(true: pl.DataFrame, pings: pl.DataFrame) -> pl.Series:
    """Tell which true passages lie between the first and the last ping of their own drive.

    Parameters
    ----------
    true : vehicle, entry_us, exit_us, trip_start_us, trip_end_us
    pings : vehicle_id, ts
    """
    seen = pings.select(vehicle="vehicle_id", at_us=pl.col("ts").dt.epoch("us")).sort("at_us")
    rows = true.with_row_index("row")
    before = rows.sort("entry_us").join_asof(
        seen, left_on="entry_us", right_on="at_us", by="vehicle", strategy="backward", check_sortedness=False
    )
    after = rows.sort("exit_us").join_asof(
        seen, left_on="exit_us", right_on="at_us", by="vehicle", strategy="forward", check_sortedness=False
    )
    ok_before = before.sort("row").select(
        ok=(pl.col("at_us") >= pl.col("trip_start_us")).fill_null(value=False)
    )
    ok_after = after.sort("row").select(ok=(pl.col("at_us") <= pl.col("trip_end_us")).fill_null(value=False))
    return (ok_before["ok"] & ok_after["ok"]).alias("is_between_pings")


def match(true: pl.DataFrame, seen: pl.DataFrame) -> pl.DataFrame:
    """Pair true and seen passages of one vehicle at one junction, nearest middles first.

    Parameters
    ----------
    true : vehicle, junction_id, arm_in, arm_out, entry_us, exit_us, ...
    seen : the same columns, from the detector

    Returns
    -------
    The true passages with `seen_arm_in`, `seen_arm_out`, `seen_entry_us`, `seen_exit_us` (null where not
    seen), each seen passage at most once; in the order of `true`.
    """
    keys = ["vehicle", "junction_id"]
    left = true.with_row_index("true_row").with_columns(middle=(pl.col("entry_us") + pl.col("exit_us")) // 2)
    right = seen.select(
        *keys,
        *(pl.col(c).alias(f"seen_{c}") for c in ("arm_in", "arm_out", "entry_us", "exit_us")),
        middle=(pl.col("entry_us") + pl.col("exit_us")) // 2,
    ).with_row_index("seen_row")
    pairs = (
        left.select("true_row", *keys, "middle", "entry_us", "exit_us")
        .join(right, on=keys, suffix="_seen")
        .with_columns(apart=(pl.col("middle") - pl.col("middle_seen")).abs())
        .filter(pl.col("apart") < NEAR_US + (pl.col("exit_us") - pl.col("entry_us")) // 2)
        .sort("apart", "true_row", "seen_row")
        .filter(pl.col("true_row").is_first_distinct())
        .filter(pl.col("seen_row").is_first_distinct())
        .drop(*keys, "middle", "entry_us", "exit_us", "middle_seen", "apart")
    )
    return left.join(pairs, on="true_row", how="left").sort("true_row").drop("true_row", "middle", "seen_row")


def accuracy(true: pl.DataFrame, seen: pl.DataFrame) -> dict[str, Any]:
    """Tell how true passages were seen.

    Parameters
    ----------
    true : as in `match`, with stood_near_gate; where it has `is_between_pings`, only those count as missed

    Returns
    -------
    n_true (that could be seen), n_seen, recall and precision (same junction at the same time), right_arms
    (of the matched), bias_ms (mean of seen minus true traversal, right arms), mean_abs_ms (those that did
    not stand near a gate).
    """
    if "is_between_pings" not in true.columns:
        true = true.with_columns(is_between_pings=pl.lit(value=True))
    could = int(true["is_between_pings"].sum())
    both = match(true, seen).filter(pl.col("seen_entry_us").is_not_null())
    right = both.filter(
        (pl.col("arm_in") == pl.col("seen_arm_in")) & (pl.col("arm_out") == pl.col("seen_arm_out"))
    ).with_columns(
        off_ms=(pl.col("seen_exit_us") - pl.col("seen_entry_us") - pl.col("exit_us") + pl.col("entry_us"))
        / 1000.0
    )
    steady = right.filter(~pl.col("stood_near_gate"))
    return {
        "n_true": could,
        "n_seen": seen.height,
        "recall": both.filter("is_between_pings").height / max(could, 1),
        "precision": both.height / max(seen.height, 1),
        "right_arms": right.height / max(both.height, 1),
        "bias_ms": right["off_ms"].mean(),
        "mean_abs_ms": steady["off_ms"].abs().mean(),
    }


def _ranked(column: str, q: float) -> pl.Expr:
    """Order statistic of rank ceil(q n), no interpolation (METHODS.md section 9)."""
    sorted_values = pl.col(column).sort()
    return sorted_values.gather((pl.len() * q).ceil().cast(pl.Int64).clip(1) - 1).first()


def by_maneuver(delays: pl.DataFrame) -> pl.DataFrame:
    """Give n, median and P85 of delay_ms by zone and maneuver, exact order statistics in ms."""
    return (
        delays.group_by("zone", "maneuver")
        .agg(n=pl.len(), p50_ms=_ranked("delay_ms", 0.5), p85_ms=_ranked("delay_ms", 0.85))
        .sort("zone", "maneuver")
    )


def compare(true: pl.DataFrame, seen: pl.DataFrame) -> pl.DataFrame:
    """Set measured delays beside true ones, by zone and maneuver.

    Parameters
    ----------
    true, seen : zone, maneuver, delay_ms

    Returns
    -------
    zone, maneuver, n_true, n_seen, p50_true_ms, p50_seen_ms, p85_true_ms, p85_seen_ms, and `is_close`:
    both quantiles within 5 % or 0.5 s of the truth.
    """
    joined = by_maneuver(true).join(
        by_maneuver(seen), on=["zone", "maneuver"], how="full", coalesce=True, suffix="_seen"
    )

    def close(q: str) -> pl.Expr:
        off = (pl.col(f"{q}_ms_seen") - pl.col(f"{q}_ms")).abs()
        return off <= pl.max_horizontal(pl.lit(500.0), pl.col(f"{q}_ms").abs() * 0.05)

    return joined.select(
        "zone",
        "maneuver",
        n_true=pl.col("n").fill_null(0),
        n_seen=pl.col("n_seen").fill_null(0),
        p50_true_ms="p50_ms",
        p50_seen_ms="p50_ms_seen",
        p85_true_ms="p85_ms",
        p85_seen_ms="p85_ms_seen",
        is_close=(close("p50") & close("p85")).fill_null(value=False),
    ).sort("zone", "maneuver")
