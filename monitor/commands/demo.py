"""``lostwork demo``: a fictional mill, from simulated readings to pages, in one go."""

from __future__ import annotations

import shutil
import time
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.group import say, write_json
from monitor.commands.opening import Opened, opened
from monitor.commands.progress import Progress
from monitor.commands.tables import Column, print_table
from monitor.commands.times import local, utc_text
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.backfill import Tally

__all__ = ["demo"]

_MARK = "lostwork.sqlite"
_LEDGER = ("supplied", "used", "lost", "destroyed", "stored_rate", "imbalance")
_WORDS = {"stored_rate": "change in store"}


@dataclass
class _Stages:
    """Wall time of each stage; a bar on a terminal, a line each in a pipe."""

    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, what: str) -> Iterator[Progress]:
        begun = time.perf_counter()
        with Progress(what) as progress:
            yield progress
        self.seconds[what] = time.perf_counter() - begun
        say(f"{what}: {self.seconds[what]:.1f} s")


def demo(
    folder: Annotated[
        Path, typer.Option("--folder", help="Where everything goes; made when it is not there.")
    ] = Path("demo"),
    days: Annotated[
        float, typer.Option("--days", min=1, max=400, help="Days of plant time to simulate.")
    ] = 60.0,
    seed: Annotated[
        int, typer.Option("--seed", help="Other numbers give other weather, load and noise.")
    ] = 62,
    *,
    keep: Annotated[
        bool, typer.Option("--keep", help="Keep the exports that are in the folder.")
    ] = False,
    truth: Annotated[
        bool,
        typer.Option("--truth", help="Write what truly happened too (160 MB); nothing reads it."),
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print the summary as JSON.")] = False,
) -> None:
    """Show it all on a simulated board mill.

    Simulates a fictional historian, computes every figure, judges drift, and writes the pages.

    Example: lostwork demo --folder demo --days 60
    """
    from monitor import backfill as work  # noqa: PLC0415
    from monitor.demo.plan import DemoPlan  # noqa: PLC0415
    from monitor.judging import judge_site, plant_now  # noqa: PLC0415

    if truth and keep:
        raise WrongUseError("--truth comes from a new simulation; leave out --keep")
    stages = _Stages()
    plan = DemoPlan(days=days, seed=seed)
    path = _exports(folder, plan, stages, keep=keep, truth=truth)
    start = int(plan.start.timestamp())
    end = start + int(days * 86400)
    with opened(path) as at, at.database.instance_lock(at.site.id, "lostwork demo"):
        with stages.stage("figures") as progress:
            tally = work.backfill(
                at.site, at.store, start, end, run_kind="demo", workers=2,
                progress=lambda n, of, _: progress.at(n / of),
            )  # fmt: skip
        with stages.stage("drift"):
            judge_site(at.site, at.store, start, end, plant_now(at.store))
        with stages.stage("pages") as progress:
            index = _pages(at, progress)
        if as_json:
            write_json(
                _summary(at, tally, start, end) | {"seconds": stages.seconds, "index": index}
            )
        else:
            _print(at, tally, start, end)
            took = ", ".join(f"{what} {spent:.1f} s" for what, spent in stages.seconds.items())
            typer.echo(f"\ntook {took}")
            typer.echo(f"open {index}")


def _exports(folder: Path, plan: object, stages: _Stages, *, keep: bool, truth: bool) -> Path:
    from monitor.demo.feed import write_exports  # noqa: PLC0415
    from monitor.demo.files import copy_site  # noqa: PLC0415
    from monitor.demo.plan import DemoPlan  # noqa: PLC0415
    from monitor.demo.simulate import simulate  # noqa: PLC0415
    from monitor.demo.truth import write_truth  # noqa: PLC0415

    if not isinstance(plan, DemoPlan):
        raise TypeError("a demo is made from a DemoPlan")
    _clear(folder, keep=keep)
    path = copy_site(folder)
    if keep and (folder / "exports").is_dir():
        return path
    with stages.stage("simulation"):
        plant = simulate(plan)
    with stages.stage("exports") as progress:
        write_exports(plant, plan, folder, progress=progress.at)
    if truth:
        with stages.stage("truth"):
            write_truth(plant, folder)
    return path


def _clear(folder: Path, *, keep: bool) -> None:
    """Make room, but only where a demo was before: nobody's own files are removed."""
    if not folder.exists() or not any(folder.iterdir()):
        return
    if not (folder / "site.toml").is_file() or not (folder / "exports").is_dir():
        raise WrongUseError(
            f"--folder {folder} holds something that is not a demo; name another folder"
        )
    for old in folder.glob(f"{_MARK}*"):
        old.unlink()
    for name in ("pages",) if keep else ("pages", "exports", "truth"):
        shutil.rmtree(folder / name, ignore_errors=True)


def _pages(at: Opened, progress: Progress) -> str:
    import pandas as pd  # noqa: PLC0415

    from monitor.judging import plant_now  # noqa: PLC0415
    from monitor.reports.pages import pages_folder, write_pages  # noqa: PLC0415
    from monitor.reports.shift import write_shift_report  # noqa: PLC0415
    from monitor.triggers import last_shifts  # noqa: PLC0415

    newest = at.store.newest()
    until = plant_now(at.store) if newest is None else newest.timestamp() + at.store.interval_s
    # The mill lives in simulated time; its pages are made when its data end.
    now = pd.Timestamp(until, unit="s", tz="UTC")
    count, written = len(at.site.items) + 3, []
    for page in write_pages(at.site, at.store, now):
        written.append(page)
        progress.at(len(written) / count, page.name)
    (span,) = last_shifts(at.site.calendar, until)
    write_shift_report(at.site, at.store, span, now, pages_folder(at.site))
    return str(written[0])


def _summary(at: Opened, tally: Tally, start: int, end: int) -> dict[str, object]:
    ledger = _ledger(at, start, end)
    return {
        "from": utc_text(start),
        "to": utc_text(end),
        "readings": tally.readings,
        "bad": tally.bad,
        "missing": tally.missing,
        "ledger_kw": ledger,
        "closure_share": _closure(ledger),
        "equipment": _equipment(at, start, end),
        "alarms": [
            {
                "raised": utc_text(a.raised), "cleared": utc_text(a.cleared),
                "equipment": a.subject, "figure": a.figure, "message": a.message,
            }
            for a in sorted(at.store.alarm_history(start, 1 << 62), key=lambda a: a.raised)
        ],
    }  # fmt: skip


def _ledger(at: Opened, start: int, end: int) -> dict[str, float]:
    means = at.store.means("site", start, end)["mean"].droplevel("subject")
    return {key: float(means[f"{key}_live_kw"]) for key in _LEDGER}


def _closure(ledger: dict[str, float]) -> float:
    """Share of what is supplied that the account explains."""
    return 1 - abs(ledger["imbalance"]) / ledger["supplied"]


def _equipment(at: Opened, start: int, end: int) -> list[dict[str, object]]:
    from monitor.costing import span_costs  # noqa: PLC0415

    means = at.store.means("equipment", start, end)["mean"]
    destroyed = {i: float(means.get((i, "destroyed_live_kw"), 0.0)) for i in at.site.items}
    total = sum(destroyed.values())
    unit_costs = span_costs(at.site, at.store, start, end).money.equipment
    ranked = sorted(destroyed.items(), key=lambda item: -item[1])
    return [
        {
            "equipment": item,
            "name": at.site.items[item].name,
            "destroyed_kw": kw,
            "share": kw / total,
            "cost_per_day": kw * 24 / 1000 * unit_costs[item],
        }
        for item, kw in ranked
    ]


def _print(at: Opened, tally: Tally, start: int, end: int) -> None:
    zone, currency = at.site.file.site.time_zone, at.site.file.economics.currency
    typer.echo(f"{at.site.file.site.name}, {local(start, zone)} to {local(end, zone)}")
    typer.echo(
        f"{_count(tally.readings)} readings read, {_count(tally.bad)} left out as bad, "
        f"{_count(tally.missing)} grid cells without a value"
    )
    ledger = _ledger(at, start, end)
    typer.echo("\nexergy account, mean rates:")
    rows = [(_WORDS.get(k, k), _count(v), f"{100 * v / ledger['supplied']:.1f} %")
            for k, v in ledger.items()]  # fmt: skip
    print_table([Column(""), Column("kW", right=True), Column("share", right=True)], rows)
    typer.echo(f"closes to {100 * _closure(ledger):.2f} % of what is supplied")
    typer.echo("\nwhere exergy is destroyed:")
    pieces = [
        (
            str(e["equipment"]),
            str(e["name"]),
            _count(float(str(e["destroyed_kw"]))),
            f"{100 * float(str(e['share'])):.1f} %",
            _count(float(str(e["cost_per_day"]))),
        )
        for e in _equipment(at, start, end)
    ]
    heads = ("", "equipment", "kW", "share", f"{currency}/day")
    print_table([Column(h, right=n > 1) for n, h in enumerate(heads)], pieces)
    alarms = sorted(at.store.alarm_history(start, 1 << 62), key=lambda a: a.raised)
    typer.echo(f"\nalarms raised: {len(alarms) or 'none'}")
    for alarm in alarms:
        over = "" if alarm.cleared is None else f", cleared {local(alarm.cleared, zone)}"
        typer.echo(f"{local(alarm.raised, zone)}{over}  {alarm.message}")


def _count(value: float) -> str:
    """A whole number with a space between thousands (ISO 80000-1)."""
    return f"{round(value):,}".replace(",", " ")
