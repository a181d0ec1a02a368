"""``lostwork explain``: where one figure comes from."""

from __future__ import annotations

import math
import time
from dataclasses import asdict
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.exits import ExitCode
from monitor.commands.group import write_json
from monitor.commands.names import known
from monitor.commands.opening import opened_to_read
from monitor.commands.tables import Column, print_table
from monitor.commands.times import local, read_time, utc_text

if TYPE_CHECKING:
    from monitor.explain import Explanation

__all__ = ["explain"]

_LEAST_SHARE = 0.001

_STATE = ("mass_flow_kg_s", "pressure_bar", "temperature_degc", "enthalpy_kj_kg",
          "entropy_kj_kgk", "dryness", "energy_kw", "exergy_live_kw")  # fmt: skip


def explain(
    site: Site,
    subject: Annotated[
        str, typer.Argument(metavar="SUBJECT", help="A stream, an equipment, or 'ledger'.")
    ],
    figure: Annotated[
        str,
        typer.Argument(metavar="FIGURE", help="For example exergy_live_kw, destroyed_live_kw."),
    ],
    at_time: Annotated[
        str, typer.Option("--at", help="A time in the grid cell; left out: the newest cell.")
    ] = "",
    *,
    as_json: Json = False,
) -> None:
    """Show where one figure comes from.

    Readings, gridded values, states, formula, numbers and units, step by step. It is read and
    computed again and compared with the stored one; exit code 1 when they differ.

    Example: lostwork explain site.toml TG1 eta_s_1 --at "2026-03-01 06:00"
    """
    from monitor.explain import explain as work  # noqa: PLC0415
    from monitor.explain import figures_of  # noqa: PLC0415
    from monitor.sources import open_sources  # noqa: PLC0415

    with opened_to_read(site) as at:
        known(subject, [*at.site.items, *at.site.streams, "ledger"], "stream or equipment")
        known(figure, figures_of(at.site, subject), f"figure of '{subject}':")
        zone = at.site.file.site.time_zone
        newest = at.store.newest()
        if at_time or newest is None:
            when = read_time(at_time or "now", zone, int(time.time()), "--at")
        else:
            when = int(newest.timestamp())
        with open_sources(at.site) as sources:
            found = work(at.site, at.store, sources, subject, figure, when)
        made = at.store.made_by(
            "stream" if subject in at.site.streams else "equipment", subject, figure, found.start
        )
        same = made is None or made.site_hash == at.site.hash
    if as_json:
        write_json(
            asdict(found)
            | {
                "start": utc_text(found.start),
                "end": utc_text(found.end),
                "by_steps": found.by_steps,
                "agrees": found.agrees,
                "made_by": None if made is None else asdict(made),
                "same_site_file": same,
            }
        )
    else:
        _print(found, zone)
        if made is not None:
            changed = "" if same else "; the site file has changed since"
            typer.echo(
                f"{'made by':16} run {made.run_id} ({made.job}), lostwork {made.version}, "
                f"site file {made.site_hash[:12]}{changed}"
            )
    if not found.agrees:
        raise typer.Exit(ExitCode.FOUND_WRONG)


def _print(found: Explanation, zone: str) -> None:
    typer.echo(
        f"{found.figure} of {found.subject}, {local(found.start, zone)} to {local(found.end, zone)}"
    )
    _section("readings (the one before the cell is still in force)")
    rows = [
        (r.tag, local(int(r.time.timestamp()), zone), _digits(r.value), r.unit, r.quality)
        for r in found.readings
    ]
    heads = ("tag", "time", "value", "unit", "quality")
    print_table([Column(h, right=h == "value") for h in heads], rows)
    _section("on the grid (time-weighted means)")
    means = [(g.tag, _digits(g.value), g.unit, g.rests_on) for g in found.gridded]
    print_table(
        [Column(h, right=h == "value") for h in ("tag", "value", "unit", "rests on")], means
    )
    _section("states")
    states = [
        (s.stream, *(_digits(s.figures[name]) for name in _STATE), s.rests_on) for s in found.states
    ]
    columns = [Column(h, right=h in _STATE) for h in ("stream", *_STATE, "rests on")]
    print_table(columns, states)
    absent = math.isnan(found.computed)
    # Steps on absent values would be a formula full of nothing.
    steps = () if absent else found.steps
    if steps:
        _section("step by step")
    for number, step in enumerate(steps, start=1):
        typer.echo(f"{number}. {step.gives}: {step.formula}")
        typer.echo(f"   {step.numbers} = {_digits(step.value)} {step.unit}")
    if found.budget and not absent:
        _uncertainty(found)
    _section("the figure")
    if absent:
        typer.echo(f"There is none in this cell: {found.rests_on}. See what is absent above.")
        if found.agrees:
            return
    for label, value in (
        ("computed now", found.computed),
        ("stored", found.stored),
        ("by these steps", found.by_steps),
    ):
        if value is not None:
            typer.echo(f"{label:16} {_digits(value)} {found.unit}".rstrip())
    if found.stored is None:
        typer.echo(f"{'stored':16} nothing for this cell")
    typer.echo(f"{'rests on':16} {found.rests_on}")
    typer.echo(f"{'they agree':16} {'yes' if found.agrees else 'NO: compute that time again'}")


def _uncertainty(found: Explanation) -> None:
    """The budget as GUM lays it out: what each instrument's class does to the figure."""
    from monitor.uncertainty.budget import COVERAGE  # noqa: PLC0415 - with all that computes

    _section("uncertainty (of the instruments' classes, the same all hour)")
    told = [line for line in found.budget if not line.share < _LEAST_SHARE]
    # Two percentages differ by points.
    unit = "points" if found.unit == "%" else found.unit
    rows = [
        (
            line.source,
            line.instrument_class + (" (default)" if line.by_default else ""),
            f"{line.moves:+.3g}",
            f"{100 * line.share:.1f}",
        )
        for line in told
    ]
    heads = ("source", "standard uncertainty", f"moves it by, {unit}", "% of variance")
    print_table([Column(h, right=h not in heads[:2]) for h in heads], rows)
    if len(told) < len(found.budget):
        typer.echo(f"and {len(found.budget) - len(told)} more that hardly move it")
    if math.isfinite(found.uncertainty):
        typer.echo(
            f"u = {_plain(found.uncertainty, 3)} {unit}; expanded (k = {COVERAGE:g}): "
            f"+/- {_plain(COVERAGE * found.uncertainty, 2)} {unit}"
        )
    if found.suspect:
        typer.echo(f"It contradicts the second law. {found.suspect}.")


def _section(title: str) -> None:
    typer.echo(f"\n{title}")


def _plain(value: float, digits: int) -> str:
    """So many digits that count, without a power of ten where whole digits say it."""
    text = f"{value:.{digits}g}"
    return f"{float(text):.0f}" if "e+" in text else text


def _digits(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:.6g}"
