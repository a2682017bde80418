"""Pairing of true and seen passages, and the figures made from the pairs."""

import polars as pl
import pytest

from stream.demo.compare import accuracy, between_pings, by_maneuver, compare, match


def passages(*rows):
    """Make passages from (vehicle, junction, arm in, arm out, entry s, exit s)."""
    return pl.DataFrame(
        [
            {
                "vehicle": v,
                "junction_id": j,
                "arm_in": i,
                "arm_out": o,
                "entry_us": round(t0 * 1e6),
                "exit_us": round(t1 * 1e6),
                "stood_near_gate": False,
            }
            for v, j, i, o, t0, t1 in rows
        ]
    )


def test_passages_pair_by_vehicle_junction_and_time():
    """Each true passage takes the nearest seen one of its vehicle and junction, and each is taken once."""
    true = passages(("a", 1, 0, 1, 0, 10), ("a", 1, 0, 1, 30, 40), ("b", 1, 0, 1, 0, 10))
    seen = passages(("a", 1, 0, 1, 31, 40), ("a", 1, 0, 2, 1, 10), ("a", 2, 0, 1, 0, 10))
    got = match(true, seen)
    assert got["seen_entry_us"].to_list() == [1_000_000, 31_000_000, None]


def test_one_seen_passage_serves_one_true_one():
    """Two true passages near one seen: the nearer one has it."""
    true = passages(("a", 1, 0, 1, 0, 10), ("a", 1, 0, 1, 20, 30))
    got = match(true, passages(("a", 1, 0, 1, 19, 30)))
    assert got["seen_entry_us"].to_list() == [None, 19_000_000]


def test_accuracy_counts_what_was_seen():
    """Two of three true passages seen, one with a wrong arm, one seen too much."""
    true = passages(("a", 1, 0, 1, 0, 10), ("a", 2, 0, 1, 30, 40), ("b", 1, 0, 1, 0, 10))
    seen = passages(("a", 1, 0, 1, 0, 10.4), ("a", 2, 0, 2, 30, 40), ("c", 1, 0, 1, 0, 10))
    got = accuracy(true, seen)
    assert (got["n_true"], got["n_seen"]) == (3, 3)
    assert got["recall"] == pytest.approx(2 / 3)
    assert got["precision"] == pytest.approx(2 / 3)
    assert got["right_arms"] == pytest.approx(1 / 2)
    assert got["bias_ms"] == pytest.approx(400.0)
    assert got["mean_abs_ms"] == pytest.approx(400.0)


def test_passage_outside_its_pings_is_no_miss_and_no_mistake():
    """A true passage that no ping could show is not missed; seen all the same, it is no false one."""
    true = passages(("a", 1, 0, 1, 0, 10), ("a", 2, 0, 1, 30, 40), ("b", 1, 0, 1, 0, 10))
    true = true.with_columns(is_between_pings=pl.Series([True, False, False]))
    got = accuracy(true, passages(("a", 1, 0, 1, 0, 10), ("a", 2, 0, 1, 30, 40)))
    assert (got["n_true"], got["recall"], got["precision"]) == (1, 1.0, 1.0)


def test_quantiles_are_order_statistics():
    """P85 of ten values is the ninth, the median the fifth. Source: rank ceil(q n), METHODS.md section 9."""
    delays = pl.DataFrame(
        {"zone": ["z"] * 10, "maneuver": ["left"] * 10, "delay_ms": [0, 0, 1, 2, 4, 8, 16, 32, 64, 128]}
    )
    assert by_maneuver(delays).to_dicts() == [
        {"zone": "z", "maneuver": "left", "n": 10, "p50_ms": 4, "p85_ms": 64}
    ]


def test_comparison_is_close_within_half_a_second_or_five_percent():
    """0.5 s off at 2 s is close, 0.6 s is not; 0.6 s off at 20 s is; what was never seen is not."""

    def frame(rows):
        return pl.DataFrame(rows, schema=["zone", "maneuver", "delay_ms"], orient="row")

    true = frame([("z", "left", 2000), ("z", "right", 2000), ("z", "through", 20_000), ("z", "reverse", 9)])
    seen = frame([("z", "left", 2500), ("z", "right", 2600), ("z", "through", 20_600)])
    got = {r["maneuver"]: (r["n_seen"], r["is_close"]) for r in compare(true, seen).to_dicts()}
    assert got == {"left": (1, True), "right": (1, False), "through": (1, True), "reverse": (0, False)}


def test_passage_before_the_drives_first_ping_is_not_between():
    """Pings of an earlier drive of the vehicle do not count for a later one."""
    drive = pl.DataFrame(
        {
            "vehicle": ["a", "a", "a"],
            "entry_us": [100_000_000, 104_000_000, 112_000_000],
            "exit_us": [103_000_000, 110_000_000, 121_000_000],
            "trip_start_us": [99_000_000] * 3,
            "trip_end_us": [125_000_000] * 3,
        }
    )
    at = pl.Series([5_000_000, 104_000_000, 112_000_000, 120_000_000, 200_000_000]).cast(
        pl.Datetime("us", "UTC")
    )
    pings = pl.DataFrame({"vehicle_id": ["a"] * 5, "ts": at})
    assert between_pings(drive, pings).to_list() == [False, True, False]
