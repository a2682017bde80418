"""YAML in, frozen settings out: checked whole, all faults reported at once.

`config/default.yaml` is the one home of default values; the models here hold names, types and ranges.
`Settings.digest` covers every key that can change a result; `run`, `privacy` and `source` stay out of it.
"""

import difflib
import hashlib
import itertools
import json
from datetime import date
from importlib import resources
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import yaml
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from stream.errors import ConfigError

Metres = Annotated[float, Field(gt=0, le=10_000)]
ByClass = float | dict[str, float]


def share_path(kind: Literal["sql", "config"]) -> Path:
    """Find the folder `sql/` or `config/`: inside an installed package, else beside it in a checkout."""
    packed = Path(str(resources.files("stream"))) / "_share" / kind
    return packed if packed.is_dir() else Path(__file__).resolve().parent.parent / kind


class _Part(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Columns(_Part):
    """Column names in the archive."""

    vehicle: str
    time: str
    lon: str
    lat: str
    speed: str | None
    heading: str | None
    accuracy: str | None


class Source(_Part):
    """How the archive is written."""

    columns: Columns
    time_unit: Literal["auto", "s", "ms", "us", "ns", "iso"]
    time_zone: str
    order: Literal["time", "vehicle", "unsorted"]
    format: Literal["auto", "parquet", "csv", "ndjson", "gpx"]


class NetworkKeys(_Part):
    """How the streets are built."""

    classes: tuple[str, ...] = Field(min_length=1, max_length=60)
    default_kmh: dict[str, Annotated[float, Field(gt=0, le=200)]]
    cluster_m: Metres
    cluster_max_m: Metres
    roundabout_max_m: Metres
    bearing_from_m: float = Field(ge=0, le=100)
    bearing_to_m: Metres
    signal_reach_m: Metres
    dead_end_min_m: float = Field(ge=0)
    driving_side: Literal["auto", "right", "left"]
    time_zone: str

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if self.bearing_from_m >= self.bearing_to_m:
            raise ValueError("bearing_from_m must be below bearing_to_m")
        if self.cluster_m > self.cluster_max_m:
            raise ValueError("cluster_m must not exceed cluster_max_m")
        if "other" not in self.default_kmh:
            raise ValueError("default_kmh needs an entry `other`")
        if len(set(self.classes)) != len(self.classes):
            raise ValueError("classes holds a value twice")
        return self


class Gates(_Part):
    """Gate distances from the mouth, one number or by class with `other`."""

    entry_m: ByClass
    exit_m: ByClass

    @model_validator(mode="after")
    def _usable(self) -> Self:
        for name in ("entry_m", "exit_m"):
            value: ByClass = getattr(self, name)
            if isinstance(value, dict) and "other" not in value:
                raise ValueError(f"{name} by class needs an entry `other`")
            numbers = value.values() if isinstance(value, dict) else [value]
            if not all(1 <= n <= 1000 for n in numbers):
                raise ValueError(f"{name} must lie within 1 to 1000 m")
        return self


def by_class(value: ByClass, name: str) -> float:
    """Look up a class in a value that may be one number for all."""
    return value.get(name, value["other"]) if isinstance(value, dict) else value


class Maneuver(_Part):
    """Limits of |turn angle| between the maneuvers."""

    through_deg: float
    slight_deg: float
    plain_deg: float
    sharp_deg: float

    @model_validator(mode="after")
    def _ascending(self) -> Self:
        limits = (0, self.through_deg, self.slight_deg, self.plain_deg, self.sharp_deg, 180)
        if any(a >= b for a, b in itertools.pairwise(limits)):
            raise ValueError("limits must ascend within 0 to 180 degrees")
        return self


class Clean(_Part):
    """Rules that drop pings."""

    lateness_s: float = Field(ge=0, le=3600)
    max_speed_kmh: float = Field(ge=20, le=2000)
    jump_slack_m: float = Field(ge=0, le=1000)


class Trips(_Part):
    """Rules that end trips."""

    max_gap_s: float = Field(ge=1, le=86_400)
    dwell_s: float = Field(ge=10, le=86_400)
    dwell_radius_m: Metres
    max_passage_s: float = Field(ge=10, le=4000)


class Follow(_Part):
    """Parameters of the road-following match."""

    sigma_m: float = Field(gt=0.1, le=100)
    beta_m: float = Field(gt=0.1, le=500)
    beta_share: float = Field(ge=0, le=2)
    radius_m: float = Field(ge=5, le=100)
    keep_m: float = Field(ge=0.5, le=20)
    anchor_m: float = Field(ge=2, le=100)
    back_m: float = Field(ge=0, le=100)
    turn_cost: float = Field(ge=0, le=50)
    reverse_cost: float = Field(ge=0, le=50)
    banned_cost: float = Field(ge=0, le=50)
    prune: float = Field(gt=0, le=100)
    route_reach_m: float = Field(ge=100, le=20_000)
    drive_share: float = Field(gt=0, le=2)


class Passages(_Part):
    """What counts as slow and as queued."""

    slow_kmh: float = Field(ge=0, le=50)
    queue_kmh: float = Field(ge=0, le=50)
    queue_look_m: float = Field(ge=0, le=500)


class Sections(_Part):
    """Which sections enter the pace histograms."""

    min_m: float = Field(ge=0, le=10_000)


class Time(_Part):
    """Time bands and day types, in a zone's local time."""

    bands: dict[str, Annotated[int, Field(ge=0, le=23)]] = Field(min_length=1)
    day_types: dict[str, tuple[Annotated[int, Field(ge=1, le=7)], ...]] = Field(min_length=1)

    @model_validator(mode="after")
    def _whole(self) -> Self:
        hours = list(self.bands.values())
        if hours[0] != 0 or any(a >= b for a, b in itertools.pairwise(hours)):
            raise ValueError("bands must start at hour 0 and ascend")
        days = sorted(d for days in self.day_types.values() for d in days)
        if days != [1, 2, 3, 4, 5, 6, 7]:
            raise ValueError("day_types must name each day 1 to 7 once")
        return self


class Privacy(_Part):
    """What may leave the store."""

    plain_ids: bool
    key_file: Path | None
    min_passages: int = Field(ge=0)
    min_vehicles: int = Field(ge=0)


class Run(_Part):
    """Keys that change no result."""

    threads: int = Field(ge=0, le=256)
    chunk_rows: int = Field(ge=1)
    memory_mb: int = Field(ge=64)


class Tally(_Part):
    """A named family of histograms with its dimensions."""

    value: Literal["delay", "pace"]
    dimensions: tuple[str, ...] = Field(min_length=1)


class Settings(_Part):
    """Everything a workspace configures."""

    source: Source
    network: NetworkKeys
    gates: Gates
    maneuver: Maneuver
    clean: Clean
    trips: Trips
    follow: Follow
    passages: Passages
    sections: Sections
    time: Time
    privacy: Privacy
    run: Run
    tallies: dict[str, Tally]

    def digest(self, *parts: str) -> str:
        """Hash the keys that change results (all of them, or only those of the named parts)."""
        names = parts or tuple(n for n in type(self).model_fields if n not in ("source", "privacy", "run"))
        text = json.dumps({n: self.model_dump(mode="json")[n] for n in names}, sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()[:16]


class Noise(_Part):
    """Position error of the demo's receivers, first-order Gauss-Markov."""

    sigma_m: float = Field(ge=0, le=50)
    tau_s: float = Field(gt=0, le=3600)


class Faults(_Part):
    """Shares of the demo's pings that are spoilt on purpose."""

    duplicate: float = Field(ge=0, le=0.1)
    null_island: float = Field(ge=0, le=0.1)
    jump: float = Field(ge=0, le=0.1)


class Demo(_Part):
    """The invented town's traffic."""

    seed: int = Field(ge=0)
    first_day: date
    days: int = Field(ge=1, le=31)
    vehicles: int = Field(ge=1, le=5000)
    trips_a_day: float = Field(gt=0, le=20)
    reach_s: tuple[float, float]
    park_share: float = Field(ge=0, le=1)
    park_s: tuple[float, float]
    intervals: dict[float, float] = Field(min_length=1)
    noise: Noise
    faults: Faults


# Maps whose keys the user makes up: given in a workspace file they replace the default as a whole.
_REPLACED = {"time.bands", "time.day_types", "tallies", "gates.entry_m", "gates.exit_m"}


def _merge(base: dict[str, Any], over: dict[str, Any], at: str = "") -> dict[str, Any]:
    out = dict(base)
    for key, value in over.items():
        where = f"{at}{key}"
        nested = isinstance(value, dict) and isinstance(base.get(key), dict) and where not in _REPLACED
        out[key] = _merge(base[key], value, where + ".") if nested else value
    return out


def _read(path: Path) -> dict[str, Any]:
    try:
        data = yaml.safe_load(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError) as err:
        raise ConfigError(f"{path}: can't be read ({err}); name a YAML file with --config") from err
    except yaml.YAMLError as err:
        raise ConfigError(f"{path}: is not YAML ({err}); mend the line it names") from err
    if data is None:
        return {}
    if not isinstance(data, dict):
        kind = type(data).__name__
        raise ConfigError(f"{path}: holds a {kind}, not keys with values; see config/default.yaml")
    return data


def _known(model: type[BaseModel], at: tuple[Any, ...]) -> list[str]:
    current: Any = model
    for step in at:
        field = getattr(current, "model_fields", {}).get(step)
        current = field.annotation if field else None
    return list(getattr(current, "model_fields", {}))


def _tell(err: ValidationError, origin: str, model: type[BaseModel] = Settings) -> ConfigError:
    lines = []
    for fault in err.errors():
        key = ".".join(str(p) for p in fault["loc"])
        if fault["type"] == "extra_forbidden":
            known = _known(model, fault["loc"][:-1])
            near = difflib.get_close_matches(str(fault["loc"][-1]), known, 1, 0.3)
            mend = f"; did you mean {near[0]}?" if near else "; the keys stand in config/default.yaml"
            lines.append(f"{origin}: unknown key {key}{mend}")
        else:
            lines.append(f"{origin}: {key} = {fault['input']!r}: {fault['msg']}")
    return ConfigError("\n".join(lines))


def load_settings(path: Path | None = None, over: dict[str, Any] | None = None) -> Settings:
    """Read defaults, then the workspace file, then overriding values, and check the whole.

    Parameters
    ----------
    path
        Workspace file; None for the defaults alone.
    over
        Nested values that win over the file (flags of the command line).

    Raises
    ------
    ConfigError
        A file that is no YAML, an unknown key, a value out of range; all faults in one message.
    """
    folder = share_path("config")
    base = _read(folder / "default.yaml")
    base["tallies"] = _read(folder / "tallies.yaml")
    merged = _merge(base, _read(path) if path else {})
    merged = _merge(merged, over or {})
    try:
        return Settings.model_validate(merged)
    except ValidationError as err:
        raise _tell(err, str(path) if path else "configuration") from err


def load_demo(over: dict[str, Any] | None = None) -> Demo:
    """Read the settings of the invented town, with overriding values.

    Raises
    ------
    ConfigError
        An unknown key or a value out of range.
    """
    merged = _merge(_read(share_path("config") / "demo.yaml"), over or {})
    try:
        return Demo.model_validate(merged)
    except ValidationError as err:
        raise _tell(err, "demo.yaml", Demo) from err
