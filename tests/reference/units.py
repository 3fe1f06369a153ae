"""Units of the reference plants: every quantity is held in kg/s, bar, K, kW, kJ/kg or 1."""

POUND = 0.45359237  # kg, exact
PSI_IN_BAR = 6894.757293168 / 1e5

# unit -> (dimension, factor, offset): held value = factor * value + offset
TABLE = {
    "kg/s": ("mass-flow", 1.0, 0.0),
    "t/h": ("mass-flow", 1 / 3.6, 0.0),
    "kg/h": ("mass-flow", 1 / 3600.0, 0.0),
    "klb/h": ("mass-flow", 1000 * POUND / 3600, 0.0),
    "bar": ("pressure", 1.0, 0.0),
    "mbar": ("pressure", 1e-3, 0.0),
    "Pa": ("pressure", 1e-5, 0.0),
    "kPa": ("pressure", 0.01, 0.0),
    "MPa": ("pressure", 10.0, 0.0),
    "[psi]": ("pressure", PSI_IN_BAR, 0.0),
    "K": ("temperature", 1.0, 0.0),
    "Cel": ("temperature", 1.0, 273.15),
    "[degF]": ("temperature", 5 / 9, 459.67 * 5 / 9),
    "kW": ("power", 1.0, 0.0),
    "MW": ("power", 1000.0, 0.0),
    "kJ/kg": ("enthalpy", 1.0, 0.0),
    "1": ("fraction", 1.0, 0.0),
    "%": ("fraction", 0.01, 0.0),
}

COVERAGE = 1.959964  # sigmas in an uncertainty at 95 %


def split(text):
    """'1008 mbar' -> (1008.0, 'mbar')."""
    number, unit = text.split()
    return float(number), unit


def difference(text, unit):
    """A quantity read as a difference, in `unit`: '1.5 K' is 2.7 in [degF]."""
    number, given = split(text)
    return number * TABLE[given][1] / TABLE[unit][1]


def to_unit(held, unit):
    _, factor, offset = TABLE[unit]
    return (held - offset) / factor


def fraction(text):
    number, unit = split(text)
    return number * TABLE[unit][1]


def uncertainty(terms, reading, unit, span=None):
    """Root sum of squares of the terms at 95 %, in the tag's own unit."""
    total = 0.0
    for term, text in terms.items():
        if term == "of-reading":
            part = fraction(text) * abs(reading)
        elif term == "of-range":
            part = fraction(text) * span
        elif term == "absolute":
            part = difference(text, unit)
        elif term == "of-differential-span":
            part = 0.5 * fraction(text) * span ** 2 / abs(reading)
        else:
            raise ValueError(f"uncertainty term {term}")
        total += part ** 2
    return total ** 0.5
