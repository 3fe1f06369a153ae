#!/usr/bin/env python3
"""Makes fluid-grid.json: properties of water and steam by two independent libraries.

    pip install iapws==1.5.5 CoolProp==8.0.0
    python make_fluid_grid.py > fluid-grid.json

Three blocks, each a list of columns and rows:

- `if97`: the forward equations of IAPWS-IF97 by `iapws`, at states of regions 1, 2 and 5 given by
  (p, T) and of region 3 given by (rho, T), from which p follows; in regions 1, 2 and 5 the script
  itself demands that CoolProp's IF97 back end agrees to 1e-8.
- `saturation`: the saturation equation and both branches up to 623.15 K, by `iapws`.
- `iapws95`: the scientific formulation IAPWS-95 by CoolProp's HEOS back end, at (p, h), wet steam
  included, with (dT/dp)_h and (dT/dh)_p. It is another equation for the same fluid, so it agrees to
  the accuracy of IAPWS-IF97 only.

Units: MPa, K, kJ/kg, kJ/(kg K), m3/kg.
"""

import json
import math

import CoolProp
import iapws
from CoolProp.CoolProp import PropsSI
from iapws import iapws97


def rounded(row):
    return [x if isinstance(x, int) else float(f"{float(x):.12g}") for x in row]


def spread(low, high, count):
    return [low + (high - low) * k / (count - 1) for k in range(count)]


def by_decade(low, high, count):
    return [math.exp(x) for x in spread(math.log(low), math.log(high), count)]


def forward(region, p, t):
    state = {1: iapws97._Region1, 2: iapws97._Region2, 5: iapws97._Region5}[region](t, p)
    for name, key, scale in (("Hmass", "h", 1e3), ("Smass", "s", 1e3), ("Cpmass", "cp", 1e3)):
        other = PropsSI(name, "P", p * 1e6, "T", t, "IF97::Water") / scale
        assert abs(other - state[key]) <= 1e-8 * max(abs(state[key]), 1.0), (p, t, name)
    return [region, p, t, state["v"], state["h"], state["s"], state["cp"]]


def if97():
    for t in (273.16, 280, 300, 330, 360, 400, 450, 500, 550, 590, 623):
        saturated = float(iapws97._PSat_T(t))
        for p in by_decade(max(1.001 * saturated, 0.001), 99.9, 8):
            yield forward(1, p, t)
        if t >= 280:
            for p in by_decade(6.2e-4, 0.999 * saturated, 8):
                yield forward(2, p, t)
    for t in (623.2, 650, 700, 750, 800, 860, 900, 950, 1000, 1070):
        top = 99.9 if t > 863.15 else 0.999 * float(iapws97._P23_T(t))
        for p in by_decade(6.2e-4, top, 12):
            yield forward(2, p, t)
    for t in (623.2, 630, 640, 646, 647.09, 647.2, 648, 650, 660, 680, 700, 740, 780, 820, 860):
        for rho in (115, 130, 150, 180, 210, 250, 300, 322, 340, 380, 420, 470, 520, 580, 640, 700, 750):
            state = iapws97._Region3(rho, t)
            p = float(state["P"])
            if not float(iapws97._P23_T(t)) * 1.0001 < p < 100:
                continue
            if t < 647.096:
                saturated = float(iapws97._PSat_T(t))
                stable = p > 1.0001 * saturated if rho > 322 else p < 0.9999 * saturated
                if not stable or 250 < rho < 380 or not state["cp"] > 0:
                    continue
            yield [3, p, t, 1 / rho, state["h"], state["s"], state["cp"]]
    for t in spread(1080, 2270, 8):
        for p in by_decade(1e-3, 49.9, 7):
            yield forward(5, p, t)


def saturation():
    for t in spread(273.16, 623.1, 40):
        p = float(iapws97._PSat_T(t))
        liquid, vapour = iapws97._Region1(t, p), iapws97._Region2(t, p)
        yield [p, t] + [side[key] for side in (liquid, vapour) for key in ("v", "h", "s")]


def iapws95():
    water = CoolProp.AbstractState("HEOS", "Water")
    for p in by_decade(0.002, 90, 16):
        for h in list(spread(100, 3900, 20)):
            try:
                water.update(CoolProp.HmassP_INPUTS, h * 1e3, p * 1e6)
            except ValueError:
                continue
            t = water.T()
            if not 274 < t < 1070:
                continue
            if water.phase() == CoolProp.iphase_twophase:
                wet, t_h = 1, 0.0
                other = CoolProp.AbstractState("HEOS", "Water")
                low, high = [], []
                for side, values in ((0.9999, low), (1.0001, high)):
                    other.update(CoolProp.PQ_INPUTS, p * 1e6 * side, 0.5)
                    values.append(other.T())
                t_p = (high[0] - low[0]) / (2e-4 * p)
            else:
                wet = 0
                t_p = water.first_partial_deriv(CoolProp.iT, CoolProp.iP, CoolProp.iHmass) * 1e6
                t_h = water.first_partial_deriv(CoolProp.iT, CoolProp.iHmass, CoolProp.iP) * 1e3
            yield [wet, p, h, t, 1 / water.rhomass(), water.smass() / 1e3, t_p, t_h]


def main():
    blocks = {
        "if97": ("region p t v h s cp", if97),
        "saturation": ("p t v' h' s' v'' h'' s''", saturation),
        "iapws95": ("wet p h t v s t_p t_h", iapws95),
    }
    made = f"make_fluid_grid.py with iapws {iapws.__version__}, CoolProp {CoolProp.__version__}"
    lines = [f'"made": {json.dumps(made)}']
    for name, (columns, rows) in blocks.items():
        body = ",\n".join(json.dumps(rounded(row), separators=(",", ":")) for row in rows())
        lines.append(f'"{name}": {{"columns": {json.dumps(columns.split())}, "rows": [\n{body}\n]}}')
    print("{\n" + ",\n".join(lines) + "\n}")


if __name__ == "__main__":
    main()
