"""Hypotheses of a plant: what each would change in the relations and measurement functions.

A hypothesis is one more unknown, b, at the end of the state vector.  Each names the
relations it changes (by what is taken from the residual, a formula of the states and b)
or the observation it adds b to.  Nothing else is said about it: its column is the
complex-step derivative of the changed problem, like that of any other state.
"""

from dataclasses import dataclass, field
from typing import Callable

import numpy as np

import estimate
import units
from plant import Measure, Relation

# kind -> (side that leaks, side that it leaks into)
BETWEEN = {"closed-heater": ("tube", "steam"), "condenser": ("cooling", "steam"),
           "exchanger": ("hot", "cold")}
# ports of the shell side, where a side has more than the port it is named after
SHELL = {"closed-heater": ("steam", "drain", "vent"), "condenser": ("steam", "condensate", "vent")}


@dataclass
class Hypothesis:
    cause: str
    of: str
    side: str | None
    unit: str
    takes: dict[int, Callable] = field(default_factory=dict)   # relation -> (x, b) -> amount
    touches: dict[int, list] = field(default_factory=dict)     # relation -> states it adds
    observation: tuple[str, str] | None = None                 # (group, name)


def side_name(relation):
    return "flow" if relation.side == "main" else relation.side


def carried(plant, name, side):
    """The stream whose enthalpy a leak from this side has."""
    kind = plant.equipment[name]["kind"]
    if side == "steam" and kind in SHELL:
        ports = SHELL[kind]
    elif side == "main":
        ports = None
    else:
        ports = (side,)
    here = [(d, s) for q, d, s in plant.ports[name] if ports is None or q in ports]
    file_order = list(plant.streams)
    inlets, outlets = (sorted((s for d, s in here if d == want), key=file_order.index)
                       for want in ("in", "out"))
    return inlets[0] if len(inlets) == 1 else outlets[0]


def hypotheses(plant):
    """Every hypothesis of the plant, in the order of its file."""
    found = [Hypothesis("bias", n, None, m.unit, observation=("tags", n))
             for n, m in plant.tags.items()]
    found += [Hypothesis("departure", n, None, m.unit, observation=("assumptions", n))
              for n, m in plant.assumptions.items()]
    if plant.barometer_value:
        found.append(Hypothesis("departure", "barometer", None, plant.barometer_value.unit,
                                observation=("barometer", "barometer")))
    for name in plant.equipment:
        found += of_equipment(plant, name)
    found += [Hypothesis("passing", r.equipment, None, "kg/s", {k: lambda x, b: b}, {k: []})
              for k, r in enumerate(plant.relations) if r.name == f"{r.equipment}: closed"]
    return found


def of_equipment(plant, name):
    rows = {r.balance + (":" + r.side if r.side else ""): k
            for k, r in enumerate(plant.relations) if r.equipment == name and r.balance}
    energy = rows.get("energy")
    for row, k in rows.items():
        if not row.startswith("mass"):
            continue
        relation = plant.relations[k]
        leak = Hypothesis("leak", name, side_name(relation), "kg/s", {k: lambda x, b: b}, {k: []})
        if energy is not None:
            i = plant.index["h:" + carried(plant, name, relation.side)]
            leak.takes[energy] = lambda x, b, i=i: b * x[i]
            leak.touches[energy] = [i]
        yield leak
    source, sink = BETWEEN.get(plant.equipment[name]["kind"], (None, None))
    if f"mass:{source}" in rows and f"mass:{sink}" in rows:
        a, b = rows[f"mass:{source}"], rows[f"mass:{sink}"]
        yield Hypothesis("leak-between", name, f"{source} into {sink}", "kg/s",
                         {a: lambda x, b: b, b: lambda x, b: -b}, {a: [], b: []})
    if energy is not None and not plant._given(name, "loss"):
        yield Hypothesis("heat-loss", name, None, "kW", {energy: lambda x, b: b}, {energy: []})


def changed_relations(plant, hypothesis):
    """The relations with b, the last state, taken out of those the hypothesis names."""
    b, relations = len(plant.states), list(plant.relations)
    for k, amount in hypothesis.takes.items():
        old = relations[k]
        relations[k] = Relation(
            old.name, old.equipment, old.balance, old.side,
            sorted({*old.touches, *hypothesis.touches[k], b}),
            lambda x, old=old, amount=amount: old.residual(x) - amount(x, x[b]))
    return relations


def changed_problem(plant, observations, scale, hypothesis, width):
    """The problem with the hypothesis' size as its last state, in scale `width`; None where it
    blames an observation that the batch has not."""
    b = len(plant.states)
    plain = observations.problem(scale)
    relations = changed_relations(plant, hypothesis)
    measures = list(plain.measures)
    if hypothesis.observation:
        places = [k for k, u in enumerate(observations.used) if u[:2] == hypothesis.observation]
        if not places:
            return None
        old = measures[places[0]]
        measures[places[0]] = Measure(old.name, old.unit, [*old.touches, b],
                                      lambda x: old.value(x) + x[b], old.spec)
    return estimate.Problem(relations, measures, plain.y, plain.sigma, np.append(scale, width))


def planted_relations(plant, hypothesis, size):
    """The relations of a plant in which the hypothesis is true to this size."""
    relations = list(plant.relations)
    for k, amount in hypothesis.takes.items():
        old = relations[k]
        relations[k] = Relation(
            old.name, old.equipment, old.balance, old.side,
            sorted({*old.touches, *hypothesis.touches[k]}),
            lambda x, old=old, amount=amount: old.residual(x) - amount(x, size))
    return relations


def natural_width(plant, observations, hypothesis):
    """A size to scale the unknown by: sigma of a reading, 1 kg/s, or 1000 kW."""
    if hypothesis.observation:
        return next((u[4] for u in observations.used if u[:2] == hypothesis.observation), 1.0)
    return {"kg/s": 1.0, "kW": 1000.0}[hypothesis.unit]
