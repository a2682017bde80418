"""The commands that only look: status, audit, quantiles."""

from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.say import Session, counts, table
from stream.errors import ConfigError

if TYPE_CHECKING:
    from stream.store import Store

_SHOWN = (5, 15, 50, 85, 95)
_ENDS = ("", "lower_", "upper_")


def _open(session: Session) -> "Store":
    from stream.store import Store

    return Store.open(session.store, read_only=True, memory_mb=session.settings().run.memory_mb)


def status(ctx: typer.Context) -> None:
    """Show what the store holds."""
    from stream.store.status import status as sum_up

    session: Session = ctx.obj
    with _open(session) as store:
        whole = sum_up(store)
    session.result(whole, _status_told(whole))


def _status_told(whole: dict[str, Any]) -> str:
    lines = [f"store: {whole['store']}, {whole['size_bytes'] / 1e6:,.1f} MB"]
    net = whole["network"]
    if net is None:
        return lines[0] + "\nnetwork: none; run `turntally network EXTRACT`"
    lines.append(
        f"network: {net['network_digest'][:12]}, {net['n_junctions']:,} junctions, {net['n_arms']:,} arms, "
        f"{net['n_links']:,} links, {net['n_movements']:,} movements"
    )
    lines.append(
        f"rows: {whole['rows_in']:,} in = {whole['rows_used']:,} used + {whole['rows_dropped']:,} dropped "
        f"+ {whole['rows_held']:,} held"
    )
    lines.append(f"dropped: {counts(whole['dropped'])}")
    lines.append(
        f"found: {whole['passages']:,} passages, {whole['sections']:,} sections, {whole['trips']:,} trips "
        f"of {whole['n_vehicles']:,} vehicles"
    )
    lines.append(f"unfinished passages: {counts(whole['unfinished'])}")
    lines.append(f"open: {whole['open_trips']:,} trips, {whole['open_passages']:,} passages")
    if whole["batches"]:
        heads = ("batch", "first ping", "last ping", "rows in", "used", "dropped", "passages", "trips", "")
        lines += ["", table(heads, [_batch_row(b) for b in whole["batches"]], left=3)]
    return "\n".join(lines)


def _batch_row(one: dict[str, Any]) -> list[str]:
    seen = [
        "-" if at is None else f"{at:%Y-%m-%d %H:%M}" for at in (one["first_ping_at"], one["last_ping_at"])
    ]
    numbers = [f"{one[k]:,}" for k in ("rows_in", "rows_used", "rows_dropped", "passages", "trips")]
    notes = ["backfill"] * one["is_backfill"] + ["rolled up"] * (one["rolled_into"] is not None)
    return [one["batch"], *seen, *numbers, ", ".join(notes)]


def audit(ctx: typer.Context) -> None:
    """Prove the store against itself: rows, time, counts."""
    from stream.store.audit import run_audit

    session: Session = ctx.obj
    with _open(session) as store:
        audits = run_audit(store)
    n_faults = sum(one["n_faults"] for one in audits)
    whole = {"store": str(session.store), "is_sound": n_faults == 0, "n_faults": n_faults, "audits": audits}
    session.result(whole, _audit_told(whole))
    if n_faults:
        raise typer.Exit(1)


def _audit_told(whole: dict[str, Any]) -> str:
    rows = [[a["audit"], f"{a['n_faults']:,}", a["looks_for"]] for a in whole["audits"]]
    lines = [table(("audit", "faults", "looks for"), rows, left=3)]
    for one in whole["audits"]:
        lines += [f"{one['audit']}: {fault}" for fault in one["faults"][:5]]
    lines.append("sound" if whole["is_sound"] else f"NOT SOUND: {whole['n_faults']:,} faults")
    return "\n".join(lines)


def quantiles(
    ctx: typer.Context,
    tally: Annotated[
        str,
        typer.Option(metavar="TALLY", help="Which tally: maneuver, angle, movement, section or your own."),
    ] = "maneuver",
    by: Annotated[
        str | None, typer.Option(metavar="DIM,...", help="Dimensions to keep apart; the others are added up.")
    ] = None,
    where: Annotated[
        list[str] | None, typer.Option(metavar="DIM=VALUE", help="Only this value; may be given again.")
    ] = None,
) -> None:
    """Show mean and P5 to P95 with 95 % limits by stratum."""
    session: Session = ctx.obj
    settings = session.settings()
    only = _conditions(where or [])
    kept = [name.strip() for name in by.split(",") if name.strip()] if by is not None else None
    from stream.export import quantile_rows

    with _open(session) as store:
        rows = quantile_rows(store, tally, kept, only, settings)
    whole = {"store": str(session.store), "tally": tally, "by": kept, "where": only, "rows": rows}
    least = (settings.privacy.min_passages, settings.privacy.min_vehicles)
    session.result(whole, _quantiles_told(rows, least) if rows else f"tally {tally} holds nothing of that")


def _quantiles_told(rows: list[dict[str, Any]], least: tuple[int, int]) -> str:
    unit = next(key for key in rows[0] if key.startswith("mean_")).removeprefix("mean_")
    dimensions = list(rows[0])[: list(rows[0]).index("n")]
    heads = [*dimensions, "n", "vehicles", "mean", *(f"P{level}" for level in _SHOWN), ""]
    cells = []
    for row in rows:
        ladder = [_with_limits(*(row[f"p{level}_{end}{unit}"] for end in _ENDS)) for level in _SHOWN]
        counted = [f"{row['n']:,}", f"{row['vehicles']:,}", f"{row[f'mean_{unit}']:.1f}"]
        named = [row[name] or "-" for name in dimensions]
        cells.append([*named, *counted, *ladder, "thin" if row["is_thin"] else ""])
    what = "delay in s" if unit == "s" else "pace in s per km"
    lines = [f"{what}; in brackets the 95 % limits", table(heads, cells, left=len(dimensions))]
    if any(row["is_thin"] for row in rows):
        lines.append(f"thin: fewer than {least[0]} passages or {least[1]} vehicles")
    return "\n".join(lines)


def _with_limits(value: float | None, low: float | None, high: float | None) -> str:
    """Write a percentile with its limits; what is open is left out."""
    shown = ["" if one is None else f"{one:.1f}" for one in (value, low, high)]
    return f"{shown[0] or 'open'} ({shown[1]}..{shown[2]})"


def _conditions(pairs: list[str]) -> dict[str, str]:
    out: dict[str, str] = {}
    for pair in pairs:
        name, equals, value = pair.partition("=")
        if not equals or not name:
            raise ConfigError(f"--where {pair!r} is not DIM=VALUE, such as --where zone=centre")
        out[name.strip()] = value.strip()
    return out
