"""Quantities at the border: text with a unit to SI, SI to text with an engineering prefix.

The units that nearly every case is written in stand in a short table. All other text is read with pint, whose import
takes as long as a small solve's passes, and a registry of our own of a few lines: its default registry costs 0.13 s
to build, this one 1 ms.
"""

import math
import re
from functools import lru_cache
from typing import Any

from daraf.bem.errors import InputError

__all__ = [
    "KINDS",
    "decimals",
    "engineering",
    "parse_quantity",
    "prefix_for",
    "rounded",
    "with_uncertainty",
]

#: What a quantity can be: SI unit and an example for messages.
KINDS = {
    "length": ("m", "5 mm"),
    "voltage": ("V", "20 kV"),
    "charge": ("C", "3 nC"),
    "angle": ("rad", "30 deg"),
    "ratio": ("", "0.5 %"),
    "pressure": ("Pa", "101.3 kPa"),
    "temperature": ("K", "20 degC"),
    "field": ("V/m", "2 kV/mm"),
}

_DEFINITIONS = """\
tera- = 1e12 = T-
giga- = 1e9 = G-
mega- = 1e6 = M-
kilo- = 1e3 = k-
hecto- = 1e2 = h-
centi- = 1e-2 = c-
milli- = 1e-3 = m-
micro- = 1e-6 = µ- = μ- = u-
nano- = 1e-9 = n-
pico- = 1e-12 = p-
femto- = 1e-15 = f-
atto- = 1e-18 = a-
meter = [length] = m = metre
second = [time] = s
ampere = [current] = A
radian = [] = rad
coulomb = ampere * second = C
volt = [voltage] = V
pascal = [pressure] = Pa
bar = 1e5 * pascal
kelvin = [temperature] = K
inch = 0.0254 * meter = in
mil = 0.001 * inch = thou
foot = 12 * inch = ft = feet
degree = 0.017453292519943295 * radian = deg = °
turn = 360 * degree
percent = 0.01 = pct
"""

#: SI value of one of each: exactly what pint makes of them, which a test checks.
_COMMON = {
    "length": {"m": 1.0, "cm": 0.01, "mm": 0.001, "µm": 1e-6, "um": 1e-6, "in": 0.0254},
    "voltage": {"V": 1.0, "mV": 0.001, "kV": 1000.0, "MV": 1e6},
    "charge": {"C": 1.0, "µC": 1e-6, "uC": 1e-6, "nC": 1e-9, "pC": 1e-12},
    "angle": {"rad": 1.0, "deg": 0.017453292519943295, "°": 0.017453292519943295},
    "ratio": {"%": 0.01},
}

_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*\Z", re.DOTALL)
_UNIT = re.compile(r"[A-Za-zµμ°%]+(?:\s*[/*]\s*[A-Za-zµμ°%]+|\s*(?:\*\*|\^)\s*\d)*\Z")
_PREFIXES = {
    -24: "y", -21: "z", -18: "a", -15: "f", -12: "p", -9: "n", -6: "µ", -3: "m",
    0: "", 3: "k", 6: "M", 9: "G", 12: "T", 15: "P",
}  # fmt: skip


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint

    registry: Any = pint.UnitRegistry(None)
    for line in _DEFINITIONS.splitlines():
        registry.define(line)
    return registry


def parse_quantity(value: Any, kind: str) -> float:
    """Value in SI of a number or of text with a unit.

    Parameters
    ----------
    value : int, float or str
        A bare number is taken in SI (a ratio as it is).
    kind : str
        One of `KINDS`.

    Returns
    -------
    float
        In SI; a ratio as a fraction.

    Raises
    ------
    InputError
        If the value is no finite number with a unit of this kind.

    Examples
    --------
    >>> parse_quantity("20 kV", "voltage")
    20000.0
    >>> parse_quantity("0.5 %", "ratio")
    0.005
    """
    unit, example = KINDS[kind]
    if isinstance(value, bool) or not isinstance(value, int | float | str):
        raise InputError(f"{value!r} is no {kind}; write a number in SI or text such as {example!r}")
    number = _from_text(value, kind, unit, example) if isinstance(value, str) else float(value)
    if not math.isfinite(number):
        raise InputError(f"{value!r} is not finite; write a {kind} such as {example!r}")
    return number


def _from_text(text: str, kind: str, unit: str, example: str) -> float:
    found = _NUMBER.match(text)
    if not found:
        raise InputError(f"{text!r} does not start with a number; write a {kind} such as {example!r}")
    number, given = float(found[1]), found[2]
    if kind == "temperature" and given in ("degC", "°C", "C"):
        return number + 273.15
    if re.match(r",\s*\d", given):
        raise InputError(f"{text!r} holds a decimal comma; write a decimal point, such as {example!r}")
    if not given:
        if unit:
            raise InputError(f"{text!r} has no unit; write a {kind} such as {example!r}, or a bare number in {unit}")
        return number
    common = _COMMON.get(kind, {}).get(given)
    if common is not None:
        return number * common
    if not _UNIT.match(given):
        raise InputError(f"{text!r}: {given!r} is no unit; write a {kind} such as {example!r}")
    return number * _factor(text, given, kind, unit, example)


def _factor(text: str, given: str, kind: str, unit: str, example: str) -> float:
    """SI value of one ``given``."""
    import pint

    registry = _registry()
    try:
        one = registry.Quantity(1.0, given.replace("%", "percent").replace('"', "inch"))
        return float(one.to(unit or "dimensionless").magnitude)
    except pint.UndefinedUnitError:
        raise InputError(f"{text!r}: unknown unit {given!r}; write a {kind} such as {example!r}") from None
    except pint.DimensionalityError:
        raise InputError(f"{text!r} is no {kind}; write a {kind} such as {example!r}") from None


def prefix_for(magnitude: float) -> tuple[int, str]:
    """Exponent and sign of the engineering prefix that puts a magnitude into 1 to 999.

    Examples
    --------
    >>> prefix_for(3.3e-12)
    (-12, 'p')
    """
    if not math.isfinite(magnitude) or magnitude == 0.0:
        return 0, ""
    # The small step lets 999.9999999 pF, one rounding below 1 nF, count as 1 nF.
    exponent = 3 * math.floor(math.log10(abs(magnitude) * (1 + 1e-12)) / 3)
    exponent = min(max(exponent, min(_PREFIXES)), max(_PREFIXES))
    return exponent, _PREFIXES[exponent]


def decimals(uncertainty: float, most: int = 9) -> int:
    """Decimal places that show two significant digits of an uncertainty.

    Examples
    --------
    >>> decimals(0.0123), decimals(0.0996), decimals(450.0)
    (3, 2, 0)
    """
    if not math.isfinite(uncertainty) or uncertainty <= 0.0:
        return most
    # 0.0996 rounds to 0.10: ask the formatted number, not the logarithm of the raw one.
    exponent = int(f"{uncertainty:.1e}".split("e")[1])
    return min(max(1 - exponent, 0), most)


def rounded(value: float, uncertainty: float, exponent: int) -> tuple[str, str]:
    """Value and uncertainty over ``10**exponent``, to the uncertainty's two significant digits.

    An exact value (uncertainty 0) is written with six significant digits and an empty uncertainty.

    Examples
    --------
    >>> rounded(12.3456e-12, 0.0123e-12, -12)
    ('12.346', '0.012')
    """
    scale = 10.0**-exponent
    value, uncertainty = value * scale, uncertainty * scale
    if not math.isfinite(uncertainty) or uncertainty <= 0.0:
        return f"{value + 0.0:.6g}", ""
    places = decimals(uncertainty)
    # Adding 0.0 turns -0.0 into 0.0; a value that rounds to zero must not keep its minus sign either.
    return f"{round(value, places) + 0.0:.{places}f}", f"{uncertainty:.{places}f}"


def with_uncertainty(value: float, uncertainty: float, unit: str) -> str:
    """Value ± uncertainty with the prefix of the larger of the two.

    Examples
    --------
    >>> with_uncertainty(12.3456e-12, 0.0123e-12, "F")
    '12.346 ± 0.012 pF'
    >>> with_uncertainty(5000.0, 0.0, "V")
    '5 kV'
    """
    exponent, prefix = prefix_for(max(abs(value), uncertainty))
    text, spread = rounded(value, uncertainty, exponent)
    return f"{text} ± {spread} {prefix}{unit}" if spread else f"{text} {prefix}{unit}"


def engineering(value: float, unit: str, digits: int = 4) -> str:
    """Value with an engineering prefix and so many significant digits.

    Examples
    --------
    >>> engineering(0.00523, "m")
    '5.23 mm'
    """
    exponent, prefix = prefix_for(value)
    return f"{value * 10.0**-exponent:.{digits}g} {prefix}{unit}"
