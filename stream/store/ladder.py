"""Quantile ladders: histograms added up over the strata that a question doesn't tell apart.

Guarantee: counts, sums and ranks are whole numbers from the histograms of all batches; vehicles are counted
from the rows themselves, each once per line however many strata the line adds up.
"""

import difflib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import polars as pl

from stream.config import Settings
from stream.errors import ConfigError, StoreError
from stream.store.database import Store
from stream.tally import ladder_ms

LEVELS = (5, 15, 50, 85, 95)  # percent
_QS = tuple(Fraction(level, 100) for level in LEVELS)
# What a tally of many dimensions is shown by when nothing else is asked for.
_SHORT = ("zone", "maneuver")
_MANEUVERS = (
    "through",
    "slight_right",
    "right",
    "sharp_right",
    "slight_left",
    "left",
    "sharp_left",
    "reverse",
)


@dataclass(frozen=True)
class KeptTally:
    """One tally that the store keeps.

    Attributes
    ----------
    name
    value : `delay` (ms) or `pace` (ms per km)
    dimensions
    reference_id : version of the cruise speeds that its delays rest on
    """

    name: str
    value: str
    dimensions: tuple[str, ...]
    reference_id: int

    @property
    def unit(self) -> str:
        """Give the ending of its figures' names: seconds, or seconds per km."""
        return "s" if self.value == "delay" else "s_per_km"


def kept_tallies(store: Store) -> dict[str, KeptTally]:
    """List the tallies of the store, in name order; empty before the first batch."""
    rows = store.run("export/tallies")
    return {name: KeptTally(name, value, tuple(dims), ref) for name, value, dims, ref in rows}


def _nearest(word: str, known: Sequence[str]) -> str:
    near = difflib.get_close_matches(word, known, 1, 0.4)
    return f"did you mean {near[0]}?" if near else f"there are {', '.join(k or repr(k) for k in known)}"


def find_tally(store: Store, name: str) -> KeptTally:
    """Look a tally up.

    Raises
    ------
    StoreError
        The store holds no batch yet, or histograms in other bins.
    ConfigError
        It keeps no such tally; the nearest one is named.
    """
    store.check_bins()
    kept = kept_tallies(store)
    if not kept:
        raise StoreError(f"{store.path}: holds no counts yet; run `turntally ingest FILE...` first")
    if name not in kept:
        raise ConfigError(f"tally {name!r}: {store.path} keeps no such tally; {_nearest(name, list(kept))}")
    return kept[name]


def _check_dimensions(tally: KeptTally, names: Sequence[str], flag: str) -> None:
    for name in names:
        if name not in tally.dimensions:
            raise ConfigError(
                f"{flag} {name}: tally {tally.name} has no such dimension; {_nearest(name, tally.dimensions)}"
            )
    if len(set(names)) != len(names):
        raise ConfigError(f"{flag} {','.join(names)}: a dimension stands twice; name it once")


def strata_of(store: Store, tally: KeptTally) -> pl.DataFrame:
    """Give the strata of a tally: `stratum_id` and one text column per dimension."""
    long = store.frame("export/strata", {"tally": tally.name})
    if long.is_empty():
        schema: dict[str, Any] = {"stratum_id": pl.Int64, **dict.fromkeys(tally.dimensions, pl.String)}
        return pl.DataFrame(schema=schema)
    return long.pivot("dimension", index="stratum_id", values="value").select("stratum_id", *tally.dimensions)


def vehicles_by(store: Store, tally: KeptTally, by: Sequence[str], settings: Settings) -> pl.DataFrame:
    """Count distinct vehicles by dimensions of a tally, from its passages or sections.

    Returns
    -------
    frame
        One text column per dimension in `by`, and `vehicles`.
    """
    params: dict[str, Any] = {"by": list(by)}
    if tally.value == "delay":
        return store.frame("export/passage_vehicles", params).select(*by, "vehicles")
    bands, types = settings.time.bands, settings.time.day_types
    params["min_m"] = settings.sections.min_m
    params["band_of_hour"] = [[b for b, first in bands.items() if first <= h][-1] for h in range(24)]
    params["type_of_day"] = [next(t for t, days in types.items() if d in days) for d in range(1, 8)]
    return store.frame("export/section_vehicles", params).select(*by, "vehicles")


def _kept_where(strata: pl.DataFrame, where: Mapping[str, str]) -> pl.DataFrame:
    for name, value in where.items():
        known = strata[name].unique().sort().to_list()
        if known and value not in known:
            raise ConfigError(f"--where {name}={value}: no such value; {_nearest(value, known)}")
        strata = strata.filter(pl.col(name) == value)
    return strata


def _sort_key(name: str, value: str, settings: Settings) -> tuple[float, str]:
    """Order values the way a reader looks for them: by rank, by number, else by name."""
    ranked: dict[str, Sequence[str]] = {
        "maneuver": _MANEUVERS,
        "time_band": list(settings.time.bands),
        "day_type": list(settings.time.day_types),
        **dict.fromkeys(("class", "class_in", "class_out"), settings.network.classes),
    }
    if name in ranked:
        order = ranked[name]
        return (order.index(value) if value in order else len(order), value)
    try:
        return (float(value.partition("..")[0]), value)
    except ValueError:
        return (0.0, value)


def _slices(histogram: pl.DataFrame) -> Iterator[tuple[int, list[int], list[int]]]:
    """Give group, bins and counts, group by group, of rows sorted by group and bin."""
    group = histogram["group_ix"].to_numpy()
    bins, n = histogram["bin_ix"].to_list(), histogram["n"].to_list()
    starts = np.flatnonzero(np.diff(group, prepend=-1)).tolist()
    for start, end in zip(starts, [*starts[1:], len(group)], strict=True):
        yield int(group[start]), bins[start:end], n[start:end]


def _seconds(ms: float | None) -> float | None:
    return None if ms is None else ms / 1000


def _figures(bins: list[int], n: list[int], unit: str) -> dict[str, float | None]:
    out: dict[str, float | None] = {}
    for level, (value, low, high) in zip(LEVELS, ladder_ms(bins, n, _QS), strict=True):
        out[f"p{level}_{unit}"] = _seconds(value)
        out[f"p{level}_lower_{unit}"] = _seconds(low)
        out[f"p{level}_upper_{unit}"] = _seconds(high)
    return out


def quantile_rows(
    store: Store,
    tally: str,
    by: Sequence[str] | None,
    where: Mapping[str, str] | None,
    settings: Settings,
) -> list[dict[str, Any]]:
    """Give a quantile ladder for each combination of the dimensions asked for.

    Parameters
    ----------
    store
        An open store with counts.
    tally
        Which of its tallies.
    by
        Dimensions to keep apart, any of the tally's; the others are added up. None: zone and maneuver
        where the tally has both, else all; empty: one line for everything.
    where
        Only strata with these values.
    settings
        Limits under `privacy`, and the order of classes, bands and day types.

    Returns
    -------
    list of dict
        In the order of the values: the dimensions; `n`, `vehicles` (distinct); `is_thin`, true below
        privacy.min_passages or privacy.min_vehicles (shown all the same: it leaves by no file); `mean_s`;
        for P5, P15, P50, P85, P95 `p50_s` with distribution-free 95 % limits `p50_lower_s`, `p50_upper_s`,
        None where open. A tally of paces has `_s_per_km` in place of `_s`.

    Raises
    ------
    ConfigError
        An unknown tally, dimension or value.
    StoreError
        The store holds no counts yet.
    """
    kept = find_tally(store, tally)
    where = dict(where or {})
    if by is None:
        by = _SHORT if set(_SHORT) <= set(kept.dimensions) else kept.dimensions
    _check_dimensions(kept, by, "--by")
    _check_dimensions(kept, list(where), "--where")
    strata = _kept_where(strata_of(store, kept), where)
    if strata.is_empty():
        return []
    of_stratum = list(strata.select(by).iter_rows()) if by else [()] * strata.height
    keys = sorted(set(of_stratum), key=lambda k: _order(by, k, settings))
    number = {key: ix for ix, key in enumerate(keys)}
    group_ix = [number[key] for key in of_stratum]
    grouped = pl.DataFrame(
        {"stratum_id": strata["stratum_id"], "group_ix": pl.Series(group_ix, dtype=pl.Int32)}
    )
    seen = _vehicles_of_groups(store, kept, by, where, settings)
    moments = store.frame("export/group_moment", {"tally": tally}, grouped)
    totals = {m["group_ix"]: m for m in moments.to_dicts()}
    lines = []
    for group, bins, n in _slices(store.frame("export/group_histogram", {"tally": tally}, grouped)):
        key = keys[group]
        count, vehicles = totals[group]["n"], seen.get(key, 0)
        thin = count < settings.privacy.min_passages or vehicles < settings.privacy.min_vehicles
        mean = {f"mean_{kept.unit}": totals[group]["sum"] / count / 1000}
        known = dict(zip(by, key, strict=True))
        known |= {"n": count, "vehicles": vehicles, "is_thin": thin}
        lines.append({**known, **mean, **_figures(bins, n, kept.unit)})
    return lines


def _order(by: Sequence[str], key: tuple[str, ...], settings: Settings) -> tuple[tuple[float, str], ...]:
    return tuple(_sort_key(name, value, settings) for name, value in zip(by, key, strict=True))


def _vehicles_of_groups(
    store: Store, tally: KeptTally, by: Sequence[str], where: Mapping[str, str], settings: Settings
) -> dict[tuple[str, ...], int]:
    """Count vehicles by the values of `by`, of the rows that `where` keeps."""
    asked = list(dict.fromkeys([*by, *where]))
    counted = vehicles_by(store, tally, asked, settings)
    for name, value in where.items():
        counted = counted.filter(pl.col(name) == value)
    return {row[:-1]: row[-1] for row in counted.select(*by, "vehicles").iter_rows()}
