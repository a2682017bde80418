"""The pass compiled ahead of need: what is compiled stays in a cache on disk, for every process."""

import numpy as np

from stream.config import load_settings
from stream.detect import fused
from stream.detect.carry import new_states
from stream.detect.run import Detector
from stream.network.model import Streets


def is_compiled() -> bool:
    """Tell whether compiled code of the present source is on disk (or compiling is switched off)."""
    cache = getattr(fused.pass_kernel, "_cache", None)
    return cache is None or bool(cache._cache_file._load_index())


def compile_here() -> None:
    """Compile everything that detection runs, by taking one ping on one street."""
    one, two = np.zeros(1, np.int32), np.zeros(2, np.int32)
    ends = np.array([520_000_000, 520_010_000], np.int32)
    none32, none64 = np.zeros(0, np.int32), np.zeros(0)
    streets = Streets(
        node_id=np.arange(2),
        node_lon_e7=two + np.int32(50_000_000),
        node_lat_e7=ends,
        node_junction=np.full(2, -1, np.int32),
        road_from=one,
        road_to=one + np.int32(1),
        road_length_m=np.array([111.0]),
        road_class=np.zeros(1, np.uint8),
        road_inside=np.full(1, -1, np.int32),
        road_way_id=np.ones(1, np.int64),
        point_start=np.array([0, 2], np.int32),
        point_lon_e7=two + np.int32(50_000_000),
        point_lat_e7=ends,
        edge_open=np.ones(2, np.uint8),
        edge_speed_mps=np.full(2, 13.9, np.float32),
        edge_link=two,
        succ_start=np.zeros(3, np.int32),
        succ_edge=none32,
        succ_turn_deg=np.zeros(0, np.float32),
        succ_banned=np.zeros(0, np.uint8),
        entry_gate_arm=np.full(2, -1, np.int32),
        entry_gate_at_m=np.zeros(2),
        exit_gate_arm=np.full(2, -1, np.int32),
        exit_gate_at_m=np.zeros(2),
        arm_junction=none32,
        arm_entry_gate_m=none64,
        arm_exit_gate_m=none64,
        arm_in_mps=np.zeros(0, np.float32),
        arm_out_mps=np.zeros(0, np.float32),
        class_names=("residential",),
    )
    detector = Detector(streets, load_settings(), threads=1)
    detector.feed(new_states(1), one, np.ones(1, np.int64), np.array([5.0]), np.array([52.0]))
