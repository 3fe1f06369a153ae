"""Water and steam in state (p, h), for the reference: p in bar, h in kJ/kg, T in K.

The forward equations of IAPWS R7-97(2012) (regions 1 and 2, the saturation
line) come from the PyPI package `iapws`; backward equations serve only to start
Newton's iteration, which goes on to 1e-12 relative against the forward
equation.  Every function here takes complex arguments and carries an imaginary
part through to first order with the analytic derivatives

    dh = cp dT + v (1 - alpha T) dp,    ds = (dh - v dp) / T,

so that a complex step of any formula built on them is an exact derivative.
Region 3 is never reached: liquid ends at 623.15 K, and steam or wet steam at 165 bar.
"""

from functools import lru_cache

from iapws import iapws97 as _if97

BAR_IN_MPA = 0.1
KJ_PER_BAR_M3 = 100.0  # 1 bar m3 = 100 kJ

P_MIN, P_SATURATION = 0.0065, 165.0  # bar; the saturation line of regions 1 and 2
T_REGION_1_3, T_REGION_2 = 623.15, 1073.15  # K; upper ends

LIQUID, WET, STEAM = "liquid", "wet", "superheated"

# IAPWS R7-97(2012), table 34: saturation line.
_N = (1167.0521452767, -724213.16703206, -17.073846940092, 12020.82470247,
      -3232555.0322333, 14.91510861353, -4823.2657361591, 405113.40542057,
      -0.23855557567849, 650.17534844798)


class OutOfRange(ValueError):
    """The state lies where the reference has no equation."""


def t_sat(p):
    """Saturation temperature, K (R7-97 equation 31; analytic, so complex p works)."""
    if not P_MIN < p.real < P_SATURATION:
        raise OutOfRange(f"pressure {p.real} bar")
    beta = (p * BAR_IN_MPA) ** 0.25
    e = beta * beta + _N[2] * beta + _N[5]
    f = _N[0] * beta * beta + _N[3] * beta + _N[6]
    g = _N[1] * beta * beta + _N[4] * beta + _N[7]
    d = 2 * g / (-f - (f * f - 4 * e * g) ** 0.5)
    return (_N[9] + d - ((_N[9] + d) ** 2 - 4 * (_N[8] + _N[9] * d)) ** 0.5) / 2


@lru_cache(maxsize=200_000)
def _forward(region, p, t):
    """(v, h, s, cp, alpha) of the forward equation at real p and t."""
    basic = _if97._Region1 if region == 1 else _if97._Region2
    q = basic(t, p * BAR_IN_MPA)
    return tuple(float(q[k]) for k in ("v", "h", "s", "cp", "alfav"))


def h_pt(region, p, t):
    v, h, _, cp, alpha = _forward(region, p.real, t.real)
    return h + 1j * (cp * t.imag + KJ_PER_BAR_M3 * v * (1 - alpha * t.real) * p.imag)


def _s_pt(region, p, t):
    v, _, s, cp, alpha = _forward(region, p.real, t.real)
    return s + 1j * (cp / t.real * t.imag - KJ_PER_BAR_M3 * v * alpha * p.imag)


def h_liquid(p):
    """Enthalpy of saturated liquid."""
    return h_pt(1, complex(p), complex(t_sat(p)))


def h_steam(p):
    """Enthalpy of dry saturated steam."""
    return h_pt(2, complex(p), complex(t_sat(p)))


def phase(p, h):
    """Phase of the real parts of (p, h)."""
    p, h = p.real, h.real
    if p >= P_SATURATION:  # compressed liquid; anything hotter fails in t_single
        return LIQUID
    if h < h_liquid(p).real:
        return LIQUID
    return STEAM if h > h_steam(p).real else WET


def _t_start(region, p, h):
    p *= BAR_IN_MPA
    return float(_if97._Backward1_T_Ph(p, h) if region == 1 else _if97._Backward2_T_Ph(p, h))


@lru_cache(maxsize=200_000)
def _t_real(region, p, h):
    t = _t_start(region, p, h)
    for _ in range(50):
        _, value, _, cp, _ = _forward(region, p, t)
        step = (h - value) / cp
        t += step
        if not 250.0 < t < 1100.0:
            raise OutOfRange(f"T(p, h) at {p} bar, {h} kJ/kg")
        if abs(step) < 1e-12 * t:
            break
    else:
        raise OutOfRange(f"T(p, h) at {p} bar, {h} kJ/kg")
    if not 273.15 <= t <= (T_REGION_1_3 if region == 1 else T_REGION_2):
        raise OutOfRange(f"T = {t} K at {p} bar")
    return t


def t_single(region, p, h):
    """Temperature on the forward equation of one region, whatever the phase."""
    p, h = complex(p), complex(h)
    if not (P_MIN < p.real < 1000.0 and -50.0 < h.real < 4200.0):
        raise OutOfRange(f"{p.real} bar, {h.real} kJ/kg")
    t = _t_real(region, p.real, h.real)
    v, _, _, cp, alpha = _forward(region, p.real, t)
    return t + 1j * (h.imag - KJ_PER_BAR_M3 * v * (1 - alpha * t) * p.imag) / cp


def temperature(p, h):
    """T(p, h), K."""
    now = phase(p, h)
    if now == WET:
        return t_sat(complex(p))
    return t_single(1 if now == LIQUID else 2, p, h)


def quality(p, h):
    """Mass fraction of steam on the saturation line (not clipped)."""
    low, high = h_liquid(p), h_steam(p)
    return (h - low) / (high - low)


def entropy(p, h):
    """s(p, h), kJ/(kg K)."""
    p, h = complex(p), complex(h)
    now = phase(p, h)
    if now == WET:
        t = t_sat(p)
        low, high = _s_pt(1, p, t), _s_pt(2, p, t)
        return low + quality(p, h) * (high - low)
    region = 1 if now == LIQUID else 2
    return _s_pt(region, p, t_single(region, p, h))


def h_ps(p, s):
    """Enthalpy at pressure and entropy (the end of an isentropic change)."""
    p, s = complex(p), complex(s)
    region, at = 1, 400.0
    if p.real < P_SATURATION:
        t = t_sat(p)
        low, high = _s_pt(1, p, t), _s_pt(2, p, t)
        if low.real <= s.real <= high.real:
            x = (s - low) / (high - low)
            return h_pt(1, p, t) * (1 - x) + h_pt(2, p, t) * x
        region, at = (1 if s.real < low.real else 2), t.real
    for _ in range(60):
        _, _, value, cp, _ = _forward(region, p.real, at)
        step = (s.real - value) * at / cp
        at += max(min(step, 100.0), -100.0)
        if abs(step) < 1e-12 * at:
            break
    else:
        raise OutOfRange(f"h(p, s) at {p.real} bar, s = {s.real}")
    v, h, _, _, _ = _forward(region, p.real, at)
    return h + 1j * (at * s.imag + KJ_PER_BAR_M3 * v * p.imag)
