"""What each column of an export means, and in which unit: the source of every data dictionary.

Guarantee: a column leaves the store only with an entry here (`tests/unit/test_export_write.py` holds the
queries to that).
"""

from dataclasses import dataclass

from stream.tally import DIMENSIONS

# By the ending of a name; where none fits, the column has no unit.
_UNITS = {"_ms": "ms", "_m": "m", "_mps": "m/s", "_kmh": "km/h", "_deg": "degree"}
_DEGREES = ("lon", "lat")


@dataclass(frozen=True)
class Column:
    """One column of an export.

    Attributes
    ----------
    name
    about : one sentence on what stands in it
    unit : symbol, or None for counts, texts and truth values
    """

    name: str
    about: str
    unit: str | None


def _gate_ends() -> dict[str, str]:
    out = {}
    for gate in ("entry", "exit"):
        for end, side in ((1, "left"), (2, "right")):
            for axis, long in (("lon", "longitude"), ("lat", "latitude")):
                where = f"{side} end of the {gate} gate, as driven"
                out[f"{gate}_{axis}{end}"] = f"{long} of the {where}, WGS 84; null without such a gate"
    return out


_ABOUT = {
    **{name: one.about for name, one in DIMENSIONS.items()},
    "arm": "number of the arm at its junction, clockwise by bearing from north, from 0",
    "arm_from": "number of the arm where the link starts; null where it is cut off",
    "arm_to": "number of the arm where the link ends; null at a dead end",
    "batch_id": "number of the batch that brought the row",
    "bearing_deg": "bearing away from the junction, clockwise from true north, 5 to 30 m beyond the mouth",
    "bin_ix": "number of the bin, from 0",
    "class": "road class, a value of the OSM key highway",
    "control": "control of the junction: signals, stop, give_way, roundabout, crossing_signals or none",
    "delay_ms": "traversal minus unimpeded time; may be negative",
    "driving_side": "side of the road that is driven on: right or left",
    "entry_at": "first reaching of the entry gate, UTC",
    "entry_gate_m": "distance of the entry gate before the mouth; 0 where there is none",
    "entry_speed_mps": "speed at the entry gate",
    "exit_at": "first reaching of the exit gate, UTC",
    "exit_gate_m": "distance of the exit gate behind the mouth; 0 where there is none",
    "gate_in_m": "distance of the entry gate before the mouth, as used",
    "gate_out_m": "distance of the exit gate behind the mouth, as used",
    "has_limit": "true where the road has a speed limit of its own, false where the class default stands in",
    "inside_m": "path from mouth to mouth",
    "is_banned": "true where a turn restriction forbids the movement",
    "is_inbound": "true where a car may drive this arm towards the junction",
    "is_open_back": "true where a car may drive the link against its direction",
    "is_open_fwd": "true where a car may drive the link along its direction",
    "is_outbound": "true where a car may drive this arm away from the junction",
    "is_queued_at_gate": "true where a queue already reached past the gate; the delay is then a lower bound",
    "is_timed": "true where a restriction forbids the movement at some times",
    "is_withheld": "true where the movement holds too few passages or vehicles; its figures are null",
    "junction_from_id": "junction where the link starts; null where it is cut off",
    "junction_id": "smallest OSM node id of the junction's cluster",
    "junction_to_id": "junction where the link ends; null at a dead end",
    "kind": "node, cluster, roundabout, circular or mini_roundabout",
    "lat": "latitude, WGS 84",
    "length_m": "length from mouth to mouth",
    "limit_in_kmh": "cruise speed towards the junction: the limit, else the class default; null if closed",
    "limit_kmh": "cruise speed: the speed limit, else the class default",
    "limit_out_kmh": "cruise speed away from the junction: the limit, else the class default; null if closed",
    "link_ix": "number of the link within this network",
    "link_m": "length of the link that the arm belongs to",
    "lon": "longitude, WGS 84",
    "lower_ms": "smallest value of the bin, for pace in ms per km; null for the bin open below",
    "max_step_ms": "largest time between two pings, inside and at the gates",
    "mean_delay_ms": "mean delay",
    "middle_back_m": "metres between the gates against the link; null where closed or a gate is missing",
    "middle_fwd_m": "metres between the gates along the link; null where closed or a gate is missing",
    "mouth_node_id": "OSM node where the arm meets the junction",
    "n": "passages (sections where value is pace) in the bin",
    "n_arms": "number of arms",
    "n_nodes": "number of nodes in the cluster",
    "n_passages": "number of passages",
    "n_pings": "number of pings between the gates",
    "n_vehicles": "number of distinct vehicles",
    "node_ids": "OSM node ids of the cluster, with blanks between",
    "p50_delay_ms": "median delay: the order statistic of rank ceil(0.5 n)",
    "p85_delay_ms": "85th percentile of delay: the order statistic of rank ceil(0.85 n)",
    "reference_id": "version of the cruise speeds that unimpeded times rest on",
    "slow_ms": "time below the speed that counts as standing",
    "stratum_id": "number of the stratum: 63 bits of a digest of tally, dimensions and values",
    "tally": "name of the tally",
    "time_zone": "IANA time zone",
    "timing_error_ms": "estimate of the standard error of the traversal",
    "total_delay_ms": "delay of all passages together",
    "traversal_ms": "exit minus entry",
    "trip_id": "number of the trip, the same in every store",
    "turn_deg": "turn angle: bearing out minus bearing in, in (-180, 180], right positive",
    "upper_ms": "upper edge of the bin, not part of it, for pace in ms per km; null for the bin open above",
    "value": "what the tally counts: delay in ms, or pace in ms per km",
    "vehicle": "keyed hash of the vehicle id, or the id as given where privacy.plain_ids was true",
    "via_node_id": "smallest OSM node id of the junction between the two ways",
    "way_from_id": "OSM way of the arm where the link starts",
    "way_id": "OSM way of the arm",
    "way_in_id": "OSM way of the arm in",
    "way_out_id": "OSM way of the arm out",
    "way_to_id": "OSM way of the arm where the link ends",
    "zone": "zone of the junction or link; empty outside all zones",
    **_gate_ends(),
}


def _unit_of(name: str) -> str | None:
    if name in _DEGREES or name.startswith(("entry_l", "exit_l")):
        return "degree"
    return next((unit for ending, unit in _UNITS.items() if name.endswith(ending)), None)


def column(name: str) -> Column:
    """Look a column up.

    Raises
    ------
    KeyError
        An export holds a column that has no entry: a fault of this program.
    """
    return Column(name, _ABOUT[name], _unit_of(name))


def known_columns() -> frozenset[str]:
    """Name all columns that have an entry."""
    return frozenset(_ABOUT)
