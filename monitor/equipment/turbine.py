"""Steam turbine of any number of sections, back-pressure or condensing.

Section k expands the flow that is left after the extractions before it:
eta_s = (h_in - h_out) / (h_in - h(p_out, s_in)). A wet exhaust has no temperature that tells its
enthalpy; its stream says ``enthalpy = "balance"`` and takes it from the shaft power.

Steam admitted between two points of the expansion expands beside the main flow, each from its own
state: eta_s = [sum(m h)in - m h_out] / sum(m [h - h(p_out, s)]), the sums over main flow and
inductions. Gland steam that leaks off passes no section; it keeps its exergy as the exhaust does.

A section loses about 1 % of its efficiency per 1 % of the mean moisture of the steam in it
(Baumann's rule), so a warm day, which dries the exhaust, passes for a better machine. With
``loss_per_moisture`` = 1.0 the efficiency is that of dry steam, eta_s / (1 - a y), y the mean of
the moistures before and after the section; by default it is as measured. Drops erode the last
blades where the exhaust is wetter than ``least_dryness``.
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, eq. 6.46 (isentropic turbine
efficiency); Bejan, Tsatsaronis, Moran (1996), table 3.3 (fuel and product of a turbine);
K. Baumann, Journal of the IEE 59, 565 (1921) (moisture; from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated, cast

import numpy as np
from pydantic import Field, model_validator

from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    StreamState,
    measured,
    total,
)
from monitor.equipment.heat_transfer import flag_where
from monitor.equipment.working import Working, enthalpies_at_boiling, isentropic_end, ratio
from monitor.flags import Flag
from monitor.site.units import Quantity
from monitor.thermo.water import saturated, state_ps

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.base import Medium
    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Section", "Turbine", "TurbineOptions", "sections"]

Share = Annotated[float, measured(Quantity.FRACTION), Field(gt=0, le=1)]


class TurbineOptions(Options):
    """Keys of a turbine's table.

    Attributes:
        drive_efficiency: measured power / power given by the steam: bearings, gear and generator.
        mechanical_efficiency, generator_efficiency: the same in two parts, when known so.
        order: streams of extractions and inductions as the steam meets them.
        least_dryness: of the exhaust, below which it is flagged [0 to 1].
        loss_per_moisture: share of its efficiency that a section loses per share of mean moisture,
            taken out of eta_s; Baumann's rule is 1, and 0 leaves it as measured.
    """

    drive_efficiency: Share = 1.0
    mechanical_efficiency: Share = 1.0
    generator_efficiency: Share = 1.0
    order: tuple[str, ...] = ()
    least_dryness: Annotated[float, measured(Quantity.FRACTION), Field(ge=0, le=1)] = 0.88
    loss_per_moisture: float = Field(default=0.0, ge=0, le=3)

    @model_validator(mode="after")
    def _said_once(self) -> TurbineOptions:
        if self.drive_efficiency < 1 and self.parts < 1:
            raise ValueError(
                "drive_efficiency is mechanical_efficiency times generator_efficiency: give it, or "
                "give the two"
            )
        return self

    @property
    def parts(self) -> float:
        """Mechanical times generator efficiency."""
        return self.mechanical_efficiency * self.generator_efficiency


class Turbine(Kind):
    """See the module's docstring."""

    name = "turbine"
    title = "Steam turbine"
    ports = (
        PortSpec("inlet", "in"),
        PortSpec("induction", "in", least=0, most=None),
        PortSpec("leak_off", "out", least=0, most=None, role="fuel"),
        PortSpec("extraction", "out", least=0, most=None, role="fuel"),
        PortSpec("exhaust", "out", role="fuel"),
        PortSpec("power", "out", media=frozenset({"power"})),
    )
    options = TurbineOptions
    fuel_and_product = "fuel: exergy given up by the steam; product: shaft or generator power"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam into the turbine [kg/s]."""
        return drawn.only("inlet").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the steam, and power [W]."""
        brought = total([s.exergy(dead) for s in drawn.facing("in")])
        left = total([s.exergy(dead) for s in drawn.facing("out") if s.medium == "water"])
        return np.asarray(brought - left), drawn.only("power").energy

    def drive_efficiency(self, item: Item) -> float:
        """Measured power / power given by the steam."""
        options = cast("TurbineOptions", item.options)
        return options.drive_efficiency * options.parts

    def complain(self, item: Item, media: Mapping[str, Medium]) -> list[str]:
        """An induction needs its place among the extractions."""
        del media
        order = cast("TurbineOptions", item.options).order
        extractions, inductions = (item.ports.get(p, ()) for p in ("extraction", "induction"))
        if not order and not inductions:
            return []
        known = (*extractions, *inductions)
        if sorted(order) != sorted(known):
            wanted = ", ".join(known) or "there are none"
            return [f"order must name each extraction and induction once, as met: {wanted}"]
        met = tuple(s for s in order if s in extractions)
        if met != extractions:
            found, said = ", ".join(met), ", ".join(extractions)
            return [f"order meets the extractions as {found}, their port as {said}: go downstream"]
        return []

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Isentropic efficiency of each section, and steam per kWh."""
        names = ["inlet", *item.ports.get("extraction", ()), "exhaust"]
        dry = cast("TurbineOptions", item.options).loss_per_moisture > 0
        efficiency = "isentropic efficiency" + (", on dry steam" if dry else "")
        single = len(names) == 2  # noqa: PLR2004
        per_section = tuple(
            Figure(
                name=f"eta_s_{number}",
                label=efficiency if single else f"{efficiency}, section {number}",
                unit="%",
                worse="low",
                smallest_change=0.7,
                load_streams=_flow_of_section(item, number),
                advice=(
                    "Check the section's thermometers and gauges against a "
                    "reference first; then think of deposits (a wash), seals and blades."
                ),
            )
            for number in range(1, len(names))
        )
        steam_rate = Figure(
            "steam_rate", "specific steam consumption", "kg/kWh", "high", 0.1, judged=False
        )
        moisture = Figure(
            "exhaust_moisture", "moisture of the exhaust", "%", "high", 1.0, judged=False
        )
        return (*per_section, steam_rate, *((moisture,) if _is_wet(item) else ()))

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        loss = cast("TurbineOptions", drawn.item.options).loss_per_moisture
        figures = {
            f"eta_s_{number}": _efficiency(section, loss)
            for number, section in enumerate(sections(drawn), start=1)
        }
        inlet, power = drawn.only("inlet"), drawn.only("power")
        with np.errstate(divide="ignore", invalid="ignore"):
            rate = np.where(power.energy > 0, inlet.mass_flow / power.energy * 3.6e6, np.nan)
        nothing = np.zeros_like(inlet.flag)
        figures["steam_rate"] = ConditionFigure(rate, np.maximum(power.energy, 0.0), nothing)
        if _is_wet(drawn.item):
            figures["exhaust_moisture"] = _moisture(drawn)
        return figures

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        if figure == "steam_rate":
            flow, power = at.only("inlet")["mass_flow_kg_s"], at.only("power")["energy_kw"]
            yield from ratio("steam per kWh", "3600 m / W", 3600.0 * flow, power, "kg/kWh")
        elif figure == "exhaust_moisture":
            exhaust = at.only("exhaust")
            h_f, h_g = enthalpies_at_boiling(exhaust["pressure_bar"])
            wet = h_g - exhaust["enthalpy_kj_kg"]
            yield from ratio("moisture", "1 - x = (h_g - h) / (h_g - h_f)", wet, h_g - h_f)
        else:
            yield from self._expansion(at, int(figure.rsplit("_", 1)[1]))

    def _expansion(self, at: AtHand, number: int) -> Iterator[Working]:
        """One section, Moran and Shapiro eq. 6.46; what joins it expands beside the main flow."""
        ports = at.item.ports
        line = [*ports["inlet"], *ports.get("extraction", ()), *ports["exhaust"]]
        names = line[number - 1 : number + 1]
        before, after = (at.streams[s] for s in names)
        h2, joining = after["enthalpy_kj_kg"], _joining(at.item, number)
        flows = _flow_of_section(at.item, number) or ((1.0, names[0]),)
        main = math.fsum(sign * at.streams[s]["mass_flow_kg_s"] for sign, s in flows)
        given, available, numbers = 0.0, 0.0, []
        for name in (names[0], *joining):
            state = at.streams[name]
            end = isentropic_end(state, after["pressure_bar"], (name, names[1]))
            yield end
            h1 = state["enthalpy_kj_kg"]
            flow = main if name == names[0] else state["mass_flow_kg_s"]
            flow = flow if joining else 1.0
            given, available = given + flow * (h1 - h2), available + flow * (h1 - end.value)
            weight = f"{flow:.5f} * " if joining else ""
            numbers.append(
                (f"{weight}({h1:.4f} - {h2:.4f})", f"{weight}({h1:.4f} - {end.value:.4f})")
            )
        loss = cast("TurbineOptions", at.item.options).loss_per_moisture
        value = 100 * given / available if available > 0 else math.nan
        above, below = (" + ".join(terms) for terms in zip(*numbers, strict=True))
        formula = (
            "sum m (h_in - h_out) / sum m (h_in - h_s)"
            if joining
            else ("(h_in - h_out) / (h_in - h_s)")
        )
        yield Working(
            "isentropic efficiency",
            f"eta_s = {formula}",
            f"[{above}] / [{below}]" if joining else f"{above} / {below}",
            value,
            "%",
            is_figure=not loss,
        )
        if loss:
            x1, x2 = (1.0 if math.isnan(s["dryness"]) else s["dryness"] for s in (before, after))
            yield Working(
                "the same on dry steam (Baumann)",
                "eta_s / (1 - a y), y = 1 - (x_in + x_out) / 2",
                f"{value:.4f} / (1 - {loss:g} * (1 - ({x1:.5f} + {x2:.5f}) / 2))",
                value / (1.0 - loss * (1.0 - (x1 + x2) / 2.0)),
                "%",
                is_figure=True,
            )


def _is_wet(item: Item) -> bool:
    """Whether the exhaust may be wet: only a balance can find that, p and T are stated for dry."""
    (exhaust,) = item.ports["exhaust"]
    return item.states(exhaust, "enthalpy") == "balance"


def _flow_of_section(item: Item, number: int) -> tuple[tuple[float, str], ...]:
    """Streams whose flows add up to a section's own: its efficiency follows that, no other.

    Empty where it is the turbine's load.
    """
    order = cast("TurbineOptions", item.options).order or item.ports.get("extraction", ())
    admitted = item.ports.get("induction", ())
    flows = [(1.0, s) for s in item.ports["inlet"]]
    flows += [(-1.0, s) for s in item.ports.get("leak_off", ())]
    passed = 1
    for stream in order:
        if passed == number:
            break
        flows.append((1.0 if stream in admitted else -1.0, stream))
        passed += stream not in admitted
    return tuple(flows) if len(flows) > 1 else ()


def _joining(item: Item, number: int) -> tuple[str, ...]:
    """Streams admitted within a section."""
    admitted = item.ports.get("induction", ())
    passed, found = 1, []
    for stream in cast("TurbineOptions", item.options).order:
        if stream not in admitted:
            passed += 1
        elif passed == number:
            found.append(stream)
    return tuple(found)


@dataclass(frozen=True)
class Section:
    """One stretch of the expansion between two known states.

    Attributes:
        before, after: the states at its ends.
        flow: that enters at the first [kg/s].
        joining: steam admitted on the way.
    """

    before: StreamState
    after: StreamState
    flow: FloatArray
    joining: tuple[StreamState, ...] = ()


def sections(drawn: Drawn) -> list[Section]:
    """The expansion in order, cut at every extraction; gland steam leaks off before it."""
    order = cast("TurbineOptions", drawn.item.options).order
    by_id = {s.id: s for s in (*drawn.at("extraction"), *drawn.at("induction"))}
    met = [by_id[s] for s in order] if order else list(drawn.at("extraction"))
    admitted = {s.id for s in drawn.at("induction")}
    before, flow = drawn.only("inlet"), drawn.only("inlet").mass_flow
    for leak in drawn.at("leak_off"):
        flow = flow - leak.mass_flow
    found: list[Section] = []
    joining: tuple[StreamState, ...] = ()
    for state in (*met, drawn.only("exhaust")):
        if state.id in admitted:
            joining = (*joining, state)
            continue
        found.append(Section(before, state, flow, joining))
        flow = total([flow, *(s.mass_flow for s in joining)]) - state.mass_flow
        before, joining = state, ()
    return found


def _efficiency(section: Section, loss_per_moisture: float) -> ConditionFigure:
    before, after = section.before, section.after
    ideal = state_ps(after.pressure, before.entropy).enthalpy
    given, available = before.enthalpy - after.enthalpy, before.enthalpy - ideal
    weight = section.flow * available
    if section.joining:
        given, available = section.flow * given, weight
        for state in section.joining:
            end = state_ps(after.pressure, state.entropy).enthalpy
            given = given + state.mass_flow * (state.enthalpy - after.enthalpy)
            available = available + state.mass_flow * (state.enthalpy - end)
        weight = available
    with np.errstate(divide="ignore", invalid="ignore"):
        efficiency = np.where(available > 0, given / available, np.nan)
    possible = np.nan_to_num(efficiency, nan=0.5)
    flag = np.where((possible > 1) | (possible < 0), np.int32(Flag.SECOND_LAW), np.int32(0))
    # The law holds what was measured against the ideal; the rule tells dry steam from wet.
    moisture = 1.0 - _mean_dryness(before, after)
    dry = 1.0 - loss_per_moisture * moisture if loss_per_moisture else 1.0
    return ConditionFigure(100.0 * efficiency / dry, np.maximum(weight * dry, 0.0), flag)


def _mean_dryness(before: StreamState, after: StreamState) -> FloatArray:
    """Of the steam in a section; what has none, above the critical point, counts as dry."""
    ends = [np.nan_to_num(state.dryness, nan=1.0) for state in (before, after)]
    return np.asarray(total(ends) / 2.0)


def _moisture(drawn: Drawn) -> ConditionFigure:
    """(h_g - h) / h_fg: below zero for steam that the balance finds superheated."""
    exhaust = drawn.only("exhaust")
    liquid, vapour = saturated(exhaust.pressure)
    moisture = (vapour.enthalpy - exhaust.enthalpy) / (vapour.enthalpy - liquid.enthalpy)
    least = cast("TurbineOptions", drawn.item.options).least_dryness
    with np.errstate(invalid="ignore"):
        impossible = (moisture < 0) | (moisture > 1)
        too_wet = moisture > 1.0 - least
    flag = flag_where(impossible) | np.where(too_wet, np.int32(Flag.MOISTURE), np.int32(0))
    return ConditionFigure(100.0 * moisture, np.maximum(exhaust.mass_flow, 0.0), flag)
