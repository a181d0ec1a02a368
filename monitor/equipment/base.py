"""What every kind of equipment is made of: ports with streams, options, and condition figures.

A kind is one control volume. It states its ports, what counts as fuel and as product, and the
figures that tell its condition; the balances, the account and the solving of unknown flows are the
same for all kinds and live in `account` and `solve`. Everything is arrays over time, SI inside.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Annotated, ClassVar, Literal

import numpy as np
import numpy.typing as npt
from pydantic import BaseModel, BeforeValidator, ConfigDict

from monitor.site.units import Quantity, UnitError, quantity

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from monitor.equipment.working import AtHand, Working
    from monitor.flags import FlagArray
    from monitor.site.models import Reference, Stream
    from monitor.thermo.dead_state import DeadState

__all__ = [
    "ConditionFigure",
    "Content",
    "Drawn",
    "Figure",
    "FloatArray",
    "Item",
    "Kind",
    "Medium",
    "Options",
    "PortSpec",
    "Signal",
    "Specific",
    "StreamState",
    "flow_mean",
    "mean_specific",
    "measured",
    "sum_flags",
    "total",
]

FloatArray = npt.NDArray[np.float64]
Medium = Literal["water", "fuel", "power", "heat"]
WATER: frozenset[Medium] = frozenset({"water"})
ANY_MEDIUM: frozenset[Medium] = frozenset({"water", "fuel", "power", "heat"})


def measured(expected: Quantity) -> BeforeValidator:
    """Validate an option given as a number with a unit ('2 t/h') into SI."""

    def read(value: object) -> object:
        if isinstance(value, str):
            return quantity(value, expected)
        if expected is Quantity.FRACTION and isinstance(value, (int, float)):
            return float(value)
        if isinstance(value, bool) or not isinstance(value, float):
            raise UnitError(f"{value!r} is not a number with a unit")
        return value

    return BeforeValidator(read)


class Options(BaseModel):
    """The keys that every kind's [[equipment]] table has beside id, kind, name and ports.

    Attributes:
        heat_loss: ``none``: the energy residual is a measured imbalance; ``balance``: the residual
            leaves as heat at the boundary temperature.
        boundary_temperature: temperature at which lost heat leaves [K]; None is the dead state's,
            so that the loss counts as destroyed.
        off_below: load under which the equipment is out of service [kg/s].
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    heat_loss: Literal["none", "balance"] = "none"
    boundary_temperature: Annotated[float, measured(Quantity.TEMPERATURE)] | None = None
    off_below: Annotated[float, measured(Quantity.MASS_FLOW)] = 0.3

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """Options that are read from tags: key -> (reference, quantity expected)."""
        return {}


@dataclass(frozen=True)
class PortSpec:
    """A port: which way it faces, how many streams it takes, and of which media.

    ``role`` says on which side of fuel and product its exergy counts, for the unit costs of
    `monitor.economics`: what leaves on the fuel's side is what the fuel brought and was not spent
    (a turbine's exhaust); what enters on the product's side is what the product was before (a
    boiler's feed water); a loss is what leaves for nothing. Empty: in is fuel, out is product.

    ``fluid`` names which of the fluids that a wall keeps apart it is of; empty where all mix.
    """

    name: str
    direction: Literal["in", "out"]
    least: int = 1
    most: int | None = 1
    media: frozenset[Medium] = WATER
    role: Literal["fuel", "product", "loss", ""] = ""
    fluid: str = ""

    @property
    def side(self) -> Literal["fuel", "product", "loss"]:
        """The role, stated or by direction."""
        return self.role or ("fuel" if self.direction == "in" else "product")


@dataclass(frozen=True)
class StreamState:
    """One stream over a window: arrays of one length.

    Attributes:
        id: the stream's id.
        medium: water, fuel, power or heat.
        mass_flow: kg/s; zero for power and heat.
        pressure: Pa absolute; NaN where not water, as the next five.
        temperature: K. enthalpy: J/kg. entropy: J/(kg K). volume: m^3/kg. dryness: 0 to 1.
        energy: W. For water mass_flow * enthalpy, for fuel mass_flow * lower heating value.
        entropy_rate: W/K. Zero for power and fuel; heat / boundary temperature for heat.
        chemical: W of exergy above ``energy`` (fuel: (ratio - 1) * lower heating value).
        boundary_is_dead: the heat crosses at the dead state, so it carries no exergy.
        flag: what the stream rests on.
    """

    id: str
    medium: Medium
    mass_flow: FloatArray
    pressure: FloatArray
    temperature: FloatArray
    enthalpy: FloatArray
    entropy: FloatArray
    volume: FloatArray
    dryness: FloatArray
    energy: FloatArray
    entropy_rate: FloatArray
    chemical: FloatArray
    flag: FlagArray
    boundary_is_dead: bool = False

    @classmethod
    def absent(cls, medium: Medium, count: int, stream: str = "") -> StreamState:
        """A stream of which nothing is known yet: NaN throughout, flag 0."""
        nan = np.full(count, np.nan)
        return cls(
            id=stream,
            medium=medium,
            mass_flow=nan,
            pressure=nan,
            temperature=nan,
            enthalpy=nan,
            entropy=nan,
            volume=nan,
            dryness=nan,
            energy=nan,
            entropy_rate=nan,
            chemical=np.zeros(count),
            flag=np.zeros(count, dtype=np.int32),
        )

    def entropy_at(self, dead: DeadState) -> FloatArray:
        """Entropy rate [W/K]; heat that crosses at the dead state takes that temperature."""
        if self.boundary_is_dead:
            return np.asarray(self.energy / dead.temperature)
        return self.entropy_rate

    def exergy(self, dead: DeadState) -> FloatArray:
        """Exergy rate [W] against a dead state: m (h - T0 s - g0), or W, or Q (1 - T0/Tb).

        With g0 = h0 - T0 s0 this is m [(h - h0) - T0 (s - s0)], the specific flow exergy of
        Bejan, Tsatsaronis and Moran, Thermal Design and Optimization (1996), eq. 3.13.
        """
        thermal = self.energy - dead.temperature * self.entropy_at(dead) + self.chemical
        if self.medium != "water":
            return np.asarray(thermal)
        return np.asarray(thermal - dead.gibbs * self.mass_flow)


@dataclass(frozen=True)
class Signal:
    """A tag that belongs to the equipment itself: a level, a valve position, a vessel's pressure.

    Attributes:
        value: mean over each grid cell, SI, shape (n,).
        edges: value at the cells' ends, SI, shape (n + 1,); the first is the window's start.
        flag: shape (n,).
    """

    value: FloatArray
    edges: FloatArray
    flag: FlagArray


@dataclass(frozen=True)
class Content:
    """What a vessel holds at the ends of the grid cells, shape (n + 1,): kg, J, J/K, m^3."""

    mass: FloatArray
    internal_energy: FloatArray
    entropy: FloatArray
    volume: FloatArray


@dataclass(frozen=True)
class Item:
    """One piece of equipment as the site file has it: its kind, and the ids at each port.

    ``spare`` names the balances (``mass``, ``energy``) that no unknown was taken from: only these
    say anything about the readings. ``statements`` is what the site file says of the streams here,
    so that a figure which would be the same by construction is not listed.
    """

    id: str
    name: str
    kind: Kind
    ports: Mapping[str, tuple[str, ...]]
    options: Options
    spare: frozenset[str] = frozenset({"mass", "energy"})
    statements: Mapping[str, Stream] = field(default_factory=dict)

    def differ(self, one: str, other: str, key: Literal["pressure", "temperature"]) -> bool:
        """Whether the readings of two streams can differ: not from one tag, not both fixed."""
        first, second = (self.statements.get(s) for s in (one, other))
        if first is None or second is None:
            return True
        a, b = getattr(first, key), getattr(second, key)
        fixed = a is not None and b is not None and a.tag is None and b.tag is None
        return a != b and not fixed

    def any_differ(
        self, inlets: str, outlets: str, key: Literal["pressure", "temperature"]
    ) -> bool:
        """Whether the readings at two ports can differ."""
        return any(
            self.differ(one, other, key)
            for one in self.ports.get(inlets, ())
            for other in self.ports.get(outlets, ())
        )

    def states(self, stream: str, key: str) -> object:
        """What the site file says of a stream under a key; None for nothing."""
        return getattr(self.statements.get(stream), key, None)

    def fluid(self, stream: str) -> str:
        """Which of the fluids that a wall keeps apart a stream is of; empty where all mix."""
        return next((p.fluid for p in self.kind.ports if stream in self.ports.get(p.name, ())), "")

    def ids(self, direction: Literal["in", "out"]) -> tuple[str, ...]:
        """Stream ids at all ports that face one way, in the order of the kind's ports."""
        return tuple(
            stream
            for port in self.kind.ports
            if port.direction == direction
            for stream in self.ports.get(port.name, ())
        )


@dataclass(frozen=True)
class Drawn:
    """One piece of equipment over one window: its streams' states and its own signals."""

    item: Item
    states: Mapping[str, tuple[StreamState, ...]]
    signals: Mapping[str, Signal]
    interval: float
    content: Content | None = None

    def at(self, port: str) -> tuple[StreamState, ...]:
        """States at a port; empty when it is not used."""
        return self.states.get(port, ())

    def only(self, port: str) -> StreamState:
        """The state at a port that takes exactly one stream."""
        (state,) = self.states[port]
        return state

    def facing(self, direction: Literal["in", "out"]) -> tuple[StreamState, ...]:
        """All states at ports that face one way."""
        return tuple(
            state
            for port in self.item.kind.ports
            if port.direction == direction
            for state in self.at(port.name)
        )


@dataclass(frozen=True)
class Figure:
    """What a condition figure is.

    Attributes:
        name: short, used in the store and on the command line.
        label: for people.
        unit: the unit its values are stored in.
        worse: which way is worse.
        smallest_change: the smallest change worth a person's time, in ``unit``.
        judged: False for a figure that is shown but follows weather or operation too much to judge.
        needs_load: the figure means nothing when the equipment is out of service.
        follows_load: the baseline has the load as regressor.
        load_streams: streams with the sign they count with, whose flows add up to the load that
            this figure follows; empty for the equipment's own.
        advice: what a person looks at first when it drifts.
    """

    name: str
    label: str
    unit: str
    worse: Literal["low", "high", "both"]
    smallest_change: float
    judged: bool = True
    needs_load: bool = True
    follows_load: bool = True
    load_streams: tuple[tuple[float, str], ...] = ()
    advice: str = ""


@dataclass(frozen=True)
class ConditionFigure:
    """Values of one condition figure over a window.

    Attributes:
        value: in the figure's unit, NaN where it has none.
        weight: the denominator that a mean over time is weighted with (1 where it has none).
        flag: reasons beyond those of the equipment's streams.
    """

    value: FloatArray
    weight: FloatArray
    flag: FlagArray


class Kind(ABC):
    """A kind of equipment. One subclass a file; see DEVELOPERS.md for how to add one."""

    name: ClassVar[str]
    title: ClassVar[str]
    ports: ClassVar[tuple[PortSpec, ...]]
    options: ClassVar[type[Options]] = Options
    fuel_and_product: ClassVar[str]
    """What counts as fuel and as product, in a sentence."""
    dissipates: ClassVar[bool] = False
    """Whether it only carries heat away for the sake of others, so that these bear its cost."""

    @abstractmethod
    def load(self, drawn: Drawn) -> FloatArray:
        """How hard the equipment works [kg/s of steam or water]."""

    @abstractmethod
    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of fuel and of product [W], after Bejan, Tsatsaronis and Moran (1996), 3.5."""

    def figures(self, item: Item) -> tuple[Figure, ...]:  # noqa: ARG002 - kinds with sections use it
        """The condition figures that this piece of equipment has."""
        return ()

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:  # noqa: ARG002
        """Values of `figures`, by name."""
        return {}

    def working(self, at: AtHand, figure: str) -> Iterable[Working]:  # noqa: ARG002
        """The steps from stored states to one condition figure; none where a kind tells none."""
        return ()

    def drive_efficiency(self, item: Item) -> float:  # noqa: ARG002
        """Measured power / power that the working fluid gives, or takes: gear, generator, motor.

        Below one where the fluid drives, above one where it is driven.
        """
        return 1.0

    def unmeasured_heat(self, drawn: Drawn) -> FloatArray | float:
        """What the drive turns into heat at the dead state [W]."""
        lost_share = 1.0 / self.drive_efficiency(drawn.item) - 1.0
        if not lost_share:
            return 0.0
        powers = [s.energy * lost_share for s in drawn.facing("out") if s.medium == "power"]
        powers += [s.energy * -lost_share for s in drawn.facing("in") if s.medium == "power"]
        return total(powers) if powers else 0.0

    def content(self, item: Item, signals: Mapping[str, Signal]) -> Content | None:  # noqa: ARG002
        """What the vessel holds at the cells' ends; None for kinds that store nothing."""
        return None

    def complain(self, item: Item, media: Mapping[str, Medium]) -> list[str]:  # noqa: ARG002
        """Say what is wrong with a site file's use of this kind, beyond ports and options."""
        return []


@dataclass(frozen=True)
class Specific:
    """Specific enthalpy [J/kg] and entropy [J/(kg K)] of a mixture."""

    enthalpy: FloatArray
    entropy: FloatArray


def total(rates: Sequence[FloatArray]) -> FloatArray:
    """Sum of one or more rates, cell by cell."""
    return np.asarray(np.add.reduce(rates))


def mean_specific(states: Sequence[StreamState]) -> Specific:
    """Flow-weighted mean enthalpy [J/kg] and entropy [J/(kg K)] of some water streams.

    Where nothing flows the plain mean of the streams' states stands in.
    """
    flow = np.maximum(np.stack([s.mass_flow for s in states]), 0.0)
    enthalpy = np.stack([s.enthalpy for s in states])
    entropy = np.stack([s.entropy for s in states])
    idle = flow.sum(axis=0) <= 0
    weight = np.where(idle, 1.0, flow)
    total = weight.sum(axis=0)
    # A stream without flow must not spoil the mean with a state that is absent.
    return Specific(
        enthalpy=np.where(weight > 0, weight * enthalpy, 0.0).sum(axis=0) / total,
        entropy=np.where(weight > 0, weight * entropy, 0.0).sum(axis=0) / total,
    )


def flow_mean(states: Sequence[StreamState], name: str) -> FloatArray:
    """Flow-weighted mean of one quantity of some water streams; NaN where none of them flows.

    A stream without flow weighs nothing, whatever its gauges say or do not say.
    """
    flow = np.maximum(np.stack([s.mass_flow for s in states]), 0.0)
    value = np.stack([getattr(s, name) for s in states])
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(flow == 0, 0.0, flow * value).sum(axis=0) / flow.sum(axis=0))


def sum_flags(states: Sequence[StreamState], signals: Sequence[Signal] = ()) -> FlagArray:
    """Bitwise or of the flags of some streams and signals."""
    flags = [s.flag for s in states] + [s.flag for s in signals]
    return np.asarray(np.bitwise_or.reduce(np.stack(flags), axis=0), dtype=np.int32)
