"""A plant file made into states, relations and measurement functions.

States: m, p, h of every stream; the own states of every piece of equipment; the
barometer where it is not exact.  A relation is `residual = 0`, in kg/s, kW, bar
or kJ/kg.  A measurement function gives a tag's or an assumption's quantity in its
own unit.  Both are plain formulas of a complex state vector, and name the states
they touch, so that a complex step gives exact sparse derivatives.
"""

import tomllib
from dataclasses import dataclass
from typing import Callable

import properties as fluid
import units

# kind -> (port of inlets, port of outlets) where the name is left out
DEFAULT_PORTS = {
    "mixer": ("in", "out"), "splitter": ("in", "out"), "header": ("in", "out"),
    "valve": ("in", "out"), "pump": ("in", "out"), "turbine": ("in", "out"),
    "open-heater": ("in", "out"), "closed-heater": ("steam", "drain"),
    "condenser": ("steam", "condensate"), "exchanger": (None, None),
    "boiler": ("water", "water"),
}
# kind -> own states; an exchanger or condenser has `heat` for `loss` when one side is missing
OWN_STATES = {
    "mixer": ["loss"], "splitter": [], "header": ["loss"], "valve": [], "pump": ["work"],
    "turbine": ["work", "loss"], "closed-heater": ["loss"], "open-heater": ["loss", "holdup"],
    "condenser": ["loss", "holdup"], "exchanger": ["loss"], "boiler": ["heat", "holdup"],
    "generator": ["power", "loss"], "shaft": ["loss"], "motor": ["power", "loss"],
}


@dataclass
class Relation:
    name: str
    equipment: str
    balance: str | None  # "mass", "energy" or None
    side: str | None     # of a mass balance
    touches: list[int]
    residual: Callable


@dataclass
class Measure:
    """The measurement function of one tag, assumption or barometer value."""
    name: str
    unit: str
    touches: list[int]
    value: Callable
    spec: dict


class Plant:
    def __init__(self, path):
        with open(path, "rb") as file:
            self.file = tomllib.load(file)
        self.streams = self.file["streams"]
        self.equipment = self.file["equipment"]
        self.name = self.file["plant"]
        self.uncertain_factor = self.file.get("uncertain-factor", 2.0)
        self._connect()
        self._number_states()
        self.relations = []
        for name, spec in self.equipment.items():
            getattr(self, "_" + spec["kind"].replace("-", "_"))(name, spec)
            self._zero_states(name)
        self._closed_streams()
        self.tags = {n: self._measure(n, t, t["measures"]) for n, t in self.file["tags"].items()}
        self.assumptions = {n: self._measure(n, a, a["value-of"])
                            for n, a in self.file.get("assumptions", {}).items()}
        self.barometer_value = self._barometer_value()

    # ---- topology -------------------------------------------------------

    def _connect(self):
        """ports[equipment] = list of (port, direction, stream)."""
        self.ports = {name: [] for name in self.equipment}
        for stream, spec in self.streams.items():
            for key, direction in (("to", "in"), ("from", "out")):
                if key in spec:
                    name, _, port = spec[key].partition(".")
                    kind = self.equipment[name]["kind"]
                    port = port or DEFAULT_PORTS[kind][direction == "out"]
                    self.ports[name].append((port, direction, stream))

    def at(self, name, port=None, direction=None):
        return [s for q, d, s in self.ports[name]
                if (port is None or q == port) and (direction is None or d == direction)]

    def one(self, name, port, direction):
        streams = self.at(name, port, direction)
        if len(streams) != 1:
            raise ValueError(f"{name}.{port} {direction}: {streams}")
        return streams[0]

    def _number_states(self):
        names = [f"{q}:{s}" for s in self.streams for q in "mph"]
        self.own = {}
        for name, spec in self.equipment.items():
            own = list(OWN_STATES[spec["kind"]])
            if self._free_heat(name):
                own[own.index("loss")] = "heat"
            self.own[name] = own
            names += [f"{q}:{name}" for q in own]
        barometer = self.file.get("barometer", {})
        self.barometer_is_state = "tag" in barometer or "uncertainty" in barometer
        if self.barometer_is_state:
            names.append("barometer")
        self.states = names
        self.index = {n: i for i, n in enumerate(names)}

    def _free_heat(self, name):
        kind = self.equipment[name]["kind"]
        if kind == "condenser":
            return not self.at(name, "cooling")
        return kind == "exchanger" and not (self.at(name, "hot") and self.at(name, "cold"))

    def _given(self, name, state):
        of = {"loss": ("heat-loss", "loss"), "holdup": ("holdup-change",)}.get(state, ())
        return any(a["of"] == name and a["value-of"] in of
                   for a in self.file.get("assumptions", {}).values())

    # ---- relations ------------------------------------------------------

    def _add(self, label, name, streams, own, residual, balance=None, side=None):
        touches = [self.index[f"{q}:{s}"] for s in streams for q in "mph"]
        touches += [self.index[f"{q}:{n}"] for q, n in own]
        self.relations.append(Relation(f"{name}: {label}", name, balance, side, touches, residual))

    def _zero_states(self, name):
        for state in self.own[name]:
            if state in ("loss", "holdup") and not self._given(name, state):
                i = self.index[f"{state}:{name}"]
                self._add(f"{state} is zero", name, [], [(state, name)], lambda x, i=i: x[i])

    def _closed_streams(self):
        for stream, spec in self.streams.items():
            if spec.get("normally-closed"):
                i = self.index["m:" + stream]
                self.relations.append(Relation(f"{stream}: closed", stream, None, None, [i],
                                               lambda x, i=i: x[i]))

    def m(self, x, stream):
        return x[self.index["m:" + stream]]

    def p(self, x, stream):
        return x[self.index["p:" + stream]]

    def h(self, x, stream):
        return x[self.index["h:" + stream]]

    def _mass(self, name, side, ports, holdup=False):
        inlets = [s for q in ports for s in self.at(name, q, "in")]
        outlets = [s for q in ports for s in self.at(name, q, "out")]
        k = self.index[f"holdup:{name}"] if holdup else None

        def residual(x):
            gap = sum(self.m(x, s) for s in inlets) - sum(self.m(x, s) for s in outlets)
            return gap - x[k] if holdup else gap
        self._add(f"mass, {side}", name, inlets + outlets, [("holdup", name)] if holdup else [],
                  residual, "mass", side)

    def _energy(self, name, leaving=(), entering=(), holdup_of=None):
        """In minus out minus what leaves (loss, work, heat) plus what enters."""
        inlets, outlets = self.at(name, direction="in"), self.at(name, direction="out")
        out = [self.index[f"{q}:{name}"] for q in leaving]
        into = [self.index[f"{q}:{name}"] for q in entering]
        own = [(q, name) for q in (*leaving, *entering)]
        k = None
        if holdup_of is not None:
            k = self.index[f"holdup:{name}"]
            own.append(("holdup", name))

        def residual(x):
            gap = sum(self.m(x, s) * self.h(x, s) for s in inlets)
            gap -= sum(self.m(x, s) * self.h(x, s) for s in outlets)
            gap += sum(x[i] for i in into) - sum(x[i] for i in out)
            return gap - x[k] * self.h(x, holdup_of) if k is not None else gap
        self._add("energy", name, inlets + outlets, own, residual, "energy")

    def _same(self, name, quantity, a, b):
        read = self.p if quantity == "pressure" else self.h
        self._add(f"{quantity} of {b} is that of {a}", name, [a, b], [],
                  lambda x: read(x, a) - read(x, b))

    def _saturated(self, name, stream, curve=fluid.h_liquid):
        self._add(f"{stream} saturated", name, [stream], [],
                  lambda x: self.h(x, stream) - curve(self.p(x, stream)))

    def _vent(self, name, vessel):
        for vent in self.at(name, "vent", "out"):
            self._same(name, "pressure", vessel, vent)
            self._saturated(name, vent, fluid.h_steam)

    def _mixer(self, name, _):
        self._mass(name, "main", ["in", "out"])
        self._energy(name, ["loss"])

    def _splitter(self, name, _):
        inlet = self.one(name, "in", "in")
        self._mass(name, "main", ["in", "out"])
        for outlet in self.at(name, "out", "out"):
            self._same(name, "enthalpy", inlet, outlet)
            self._same(name, "pressure", inlet, outlet)

    def _header(self, name, spec):
        outlets, streams = self.at(name, "out", "out"), self.at(name)
        self._mass(name, "main", ["in", "out"])
        self._energy(name, ["loss"])
        for other in streams[1:]:
            self._same(name, "pressure", streams[0], other)
        if spec.get("well-mixed", True):
            for other in outlets[1:]:
                self._same(name, "enthalpy", outlets[0], other)

    def _valve(self, name, _):
        self._mass(name, "main", ["in", "out"])
        self._same(name, "enthalpy", self.one(name, "in", "in"), self.one(name, "out", "out"))

    def _pump(self, name, _):
        self._mass(name, "main", ["in", "out"])
        self._energy(name, entering=["work"])

    def _turbine(self, name, _):
        self._mass(name, "main", ["in", "out"])
        self._energy(name, ["work", "loss"])

    def _closed_heater(self, name, spec):
        steam, drain = self.one(name, "steam", "in"), self.one(name, "drain", "out")
        self._mass(name, "steam", ["steam", "drain", "vent"])
        self._mass(name, "tube", ["tube"])
        self._energy(name, ["loss"])
        self._same(name, "pressure", steam, drain)
        if spec.get("drain-outlet") == "saturated":
            self._saturated(name, drain)
        self._vent(name, steam)

    def _open_heater(self, name, spec):
        outlet = self.one(name, "out", "out")
        self._mass(name, "main", ["in", "out", "vent"], holdup=True)
        self._energy(name, ["loss"], holdup_of=outlet)
        if spec.get("outlet") == "saturated":
            self._saturated(name, outlet)
        self._vent(name, outlet)

    def _condenser(self, name, spec):
        condensate = self.one(name, "condensate", "out")
        self._mass(name, "steam", ["steam", "condensate", "vent"], holdup=True)
        if self.at(name, "cooling"):
            self._mass(name, "cooling", ["cooling"])
        self._energy(name, [self.own[name][0]], holdup_of=condensate)
        if spec.get("condensate") == "saturated":
            self._saturated(name, condensate)
        self._vent(name, condensate)

    def _exchanger(self, name, _):
        for side in ("hot", "cold"):
            if self.at(name, side):
                self._mass(name, side, [side])
        cold_alone = self._free_heat(name) and not self.at(name, "hot")
        state = self.own[name][:1]
        self._energy(name, *(([], state) if cold_alone else (state, [])))

    def _boiler(self, name, _):
        for side in dict.fromkeys(q for q, _, _ in self.ports[name]):
            if side.startswith("reheat"):
                self._mass(name, side, [side])
        self._mass(name, "water", ["water"], holdup=True)
        # the holdup of a boiler is zero in every reference plant: its enthalpy is not needed
        self._energy(name, entering=["heat"])

    def _balance_of_work(self, name, give, take):
        own = give + take

        def residual(x):
            return (sum(x[self.index[f"{q}:{n}"]] for q, n in give)
                    - sum(x[self.index[f"{q}:{n}"]] for q, n in take))
        self._add("energy", name, [], own, residual, "energy")

    def _generator(self, name, spec):
        self._balance_of_work(name, [("work", t) for t in spec["driven-by"]],
                              [("power", name), ("loss", name)])

    def _shaft(self, name, spec):
        self._balance_of_work(name, [("work", t) for t in spec["drivers"]],
                              [("work", q) for q in spec["driven"]] + [("loss", name)])

    def _motor(self, name, spec):
        self._balance_of_work(name, [("power", name)],
                              [("work", spec["drives"]), ("loss", name)])

    # ---- measurement functions -------------------------------------------

    def _barometer_value(self):
        spec = self.file.get("barometer", {})
        if not self.barometer_is_state or "tag" in spec:
            return None
        value, unit = units.split(spec["value"])
        i = self.index["barometer"]
        whole = {"value": spec["value"], "uncertainty": spec["uncertainty"]}
        return Measure("barometer", unit, [i], lambda x: units.to_unit(x[i], unit), whole)

    def _ambient(self, x):
        if self.barometer_is_state:
            return x[self.index["barometer"]]
        value, unit = units.split(self.file["barometer"]["value"])
        return value * units.TABLE[unit][1]

    def _measure(self, name, spec, what):
        unit = spec["unit"] if "unit" in spec else units.split(spec["value"])[1]
        streams, own, held = self._quantity(spec, what)
        touches = [self.index[f"{q}:{s}"] for s in streams for q in "mph"]
        touches += [self.index[f"{q}:{n}"] for q, n in own]
        if what == "pressure" and self.barometer_is_state:
            touches.append(self.index["barometer"])
        if what in ("pressure-drop", "subcooling"):  # a difference has no offset
            factor = units.TABLE[unit][1]
            return Measure(name, unit, touches, lambda x: held(x) / factor, spec)
        return Measure(name, unit, touches, lambda x: units.to_unit(held(x), unit), spec)

    def _quantity(self, spec, what):
        """(streams, own states, function of x in held units)."""
        of = spec["of"]
        if what == "mass-flow":
            return [of], [], lambda x: self.m(x, of)
        if what == "pressure":
            return self._pressure(of, spec.get("reference", "absolute"))
        if what == "temperature":
            return [of], [], lambda x: fluid.temperature(self.p(x, of), self.h(x, of))
        if what == "quality":
            return [of], [], lambda x: fluid.quality(self.p(x, of), self.h(x, of))
        if what == "enthalpy":
            return [of], [], lambda x: self.h(x, of)
        if what in ("power", "heat-loss", "loss", "holdup-change"):
            state = {"heat-loss": "loss", "holdup-change": "holdup", "power": None}.get(what, what)
            if state is None:
                state = "power" if "power" in self.own[of] else "work"
            i = self.index[f"{state}:{of}"]
            return [], [(state, of)], lambda x: x[i]
        if what == "pressure-drop":
            name, _, port = of.partition(".")
            a, b = self.one(name, port or "in", "in"), self.one(name, port or "out", "out")
            return [a, b], [], lambda x: self.p(x, a) - self.p(x, b)
        if what == "subcooling":
            port = {"closed-heater": "drain", "condenser": "condensate", "open-heater": "out"}
            s = self.one(of, port[self.equipment[of]["kind"]], "out")
            return [s], [], lambda x: (fluid.t_sat(self.p(x, s))
                                       - fluid.t_single(1, self.p(x, s), self.h(x, s)))
        if what == "isentropic-efficiency":
            return self._efficiency(of, spec)
        raise ValueError(f"quantity {what}")

    def _pressure(self, of, reference):
        if of == "barometer":
            return [], [], self._ambient
        if reference == "gauge":
            return [of], [], lambda x: self.p(x, of) - self._ambient(x)
        if reference == "vacuum":
            return [of], [], lambda x: self._ambient(x) - self.p(x, of)
        return [of], [], lambda x: self.p(x, of)

    def _efficiency(self, of, spec):
        between = spec.get("between")
        a, b = between or (self.one(of, "in", "in"), self.one(of, "out", "out"))
        pump = self.equipment[of]["kind"] == "pump"

        def value(x):
            h_a, h_b = self.h(x, a), self.h(x, b)
            ideal = fluid.h_ps(self.p(x, b), fluid.entropy(self.p(x, a), h_a)) - h_a
            return ideal / (h_b - h_a) if pump else (h_b - h_a) / ideal
        return [a, b], [], value
