"""``lostwork baseline``: what each condition figure is expected to be, and fitting that anew."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.exits import ExitCode
from monitor.commands.group import write_json
from monitor.commands.names import known
from monitor.commands.opening import opened, opened_to_read
from monitor.commands.tables import Column, print_table
from monitor.commands.times import local, utc_text

if TYPE_CHECKING:
    from monitor.drift.judge import FigureStatus

__all__ = ["app"]

app = typer.Typer(no_args_is_help=True, help="List baselines, or fit them again.")


@app.command("list")
def list_baselines(
    site: Site,
    *,
    everything: Annotated[
        bool, typer.Option("--all", help="Also the baselines that were replaced.")
    ] = False,
    as_json: Json = False,
) -> None:
    """List the baselines in force, and the figures that have none yet.

    Example: lostwork baseline list site.toml
    """
    from monitor.judging import rules_of  # noqa: PLC0415

    with opened_to_read(site) as at:
        current = at.store.current_baselines()
        zone = at.site.file.site.time_zone
        rows, plain = [], []
        for rule in rules_of(at.site):
            key = (rule.subject, rule.figure)
            found = at.store.baseline_history(*key) if everything else []
            if not everything and key in current:
                found = [current[key]]
            if not found:
                rows.append((*key, "-", "-", "", "", "", "no baseline yet"))
            for b in found:
                start, end = local(b.reference_start, zone), local(b.reference_end, zone)
                spread = f"{b.sigma:.3g} {rule.unit}"
                state = "in force" if b.retired is None else f"until {local(b.retired, zone)}"
                rows.append((*key, start, end, str(b.points), spread, f"{b.phi:.2f}", state))
                plain.append(
                    vars(b)
                    | {
                        name: utc_text(getattr(b, name))
                        for name in ("made", "reference_start", "reference_end", "retired")
                    }
                )
    if as_json:
        write_json(plain)
        return
    heads = ("equipment", "figure", "from", "to", "hours", "spread", "autocorrelation", "state")
    right = {"hours", "spread", "autocorrelation"}
    print_table([Column(head, right=head in right) for head in heads], rows)


@app.command()
def fit(
    site: Site,
    equipment: Annotated[
        str, typer.Argument(metavar="EQUIPMENT", help="One equipment's id; left out: all.")
    ] = "",
    figure: Annotated[
        str, typer.Argument(metavar="FIGURE", help="One of its figures; left out: all of them.")
    ] = "",
    *,
    as_json: Json = False,
) -> None:
    """Fit baselines again from the reference period, and judge everything since.

    The reference period is [drift] reference_from and reference_to, else the first days after the
    last wash, overhaul or calibration (see event). Exit code 1 when a figure gets no baseline.

    Example: lostwork baseline fit site.toml TG1 eta_s_1
    """
    from monitor.judging import judge_site, plant_now, rules_of  # noqa: PLC0415

    with opened(site) as at, at.database.instance_lock(at.site.id, "lostwork baseline fit"):
        rules = rules_of(at.site)
        if equipment:
            known(equipment, dict.fromkeys(r.subject for r in rules), "judged equipment")
            rules = tuple(r for r in rules if r.subject == equipment)
        if figure:
            known(figure, [r.figure for r in rules], f"judged figure of '{equipment}'")
            rules = tuple(r for r in rules if r.figure == figure)
        now = plant_now(at.store)
        for rule in rules:
            at.store.retire_baseline(rule.subject, rule.figure, now)
        oldest, newest = at.store.oldest(), at.store.newest()
        start = now if oldest is None else int(oldest.timestamp())
        end = now if newest is None else int(newest.timestamp()) + at.store.interval_s
        statuses = judge_site(at.site, at.store, start, end, now, only=rules)
    _report(statuses, as_json=as_json)
    if any(status.state == "no baseline" for status in statuses):
        raise typer.Exit(ExitCode.FOUND_WRONG)


def _report(statuses: tuple[FigureStatus, ...], *, as_json: bool) -> None:
    rows = [(s.subject, s.figure, s.state, s.reason) for s in statuses]
    heads = ("equipment", "figure", "state", "reason")
    if as_json:
        write_json([dict(zip(heads, row, strict=True)) for row in rows])
    else:
        print_table([Column(head) for head in heads], rows)
