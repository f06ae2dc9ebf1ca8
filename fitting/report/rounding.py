"""Numbers as the GUM wants them read: the uncertainty to two significant digits, the value to the same decimal.

one number for print           format_value(value, u)        "10.058 ± 0.027"
the answer of a report         expanded(value, u)            value ± U, U = 2 u
decimals for a table or cell   decimals(u)

Source: JCGM 100:2008, 7.2.4 (form), 7.2.6 (digits; rounding an uncertainty up where rounding it down would matter).
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, ROUND_HALF_UP, ROUND_UP, Decimal

# Coverage factor of every U shown: about 95 % for a normal distribution.
COVERAGE = 2.0
# Rounding to the nearest may take this share of an uncertainty, no more: 28.05 is 28, 10.47 is 11 (the GUM's own).
_MAY_LOSE = Decimal("0.01")


def decimals(u: float) -> int:
    """Decimal places that show u to two significant digits; negative where u is 100 or more. u: positive, finite."""
    return -_exponent(round_uncertainty(u))


def round_uncertainty(u: float) -> Decimal:
    """u to two significant digits, never smaller by more than a hundredth of itself. Raises ValueError unless u > 0."""
    if not (math.isfinite(u) and u > 0):
        raise ValueError(f"uncertainty was {u}, it must be a positive number, look for the fit that gave it")
    exact = Decimal(repr(float(u)))
    step = Decimal(1).scaleb(exact.adjusted() - 1)
    near = exact.quantize(step, rounding=ROUND_HALF_UP)
    if exact - near > _MAY_LOSE * exact:
        near = exact.quantize(step, rounding=ROUND_UP)
    # 9.96 has become 10.0: three digits, of which the last says nothing
    return near.quantize(Decimal(1).scaleb(near.adjusted() - 1)) if near.adjusted() > exact.adjusted() else near


def format_number(value: float, places: int) -> str:
    """value to so many decimal places (negative: to tens, hundreds), a minus sign only where a digit is left."""
    if not math.isfinite(value):
        raise ValueError(f"value was {value}, it must be finite, look for the fit that gave it")
    exact = Decimal(repr(float(value))).quantize(Decimal(1).scaleb(-places), rounding=ROUND_HALF_EVEN)
    return f"{abs(exact) if exact == 0 else exact:f}"


def format_value(value: float, u: float, k: float = 1.0) -> str:
    """`value ± k u`, k u to two significant digits and value to the same decimal; an exact value where u is 0."""
    if u == 0:
        return f"{value:.10g} (exact)"
    wide = round_uncertainty(k * u)
    return f"{format_number(value, -_exponent(wide))} ± {wide:f}"


def expanded(value: float, u: float) -> str:
    """`value ± U` with the expanded uncertainty U = 2 u."""
    return format_value(value, u, COVERAGE)


def format_u(u: float, k: float = 1.0) -> str:
    """k u alone, to two significant digits; `0` for none."""
    return "0" if u == 0 else f"{round_uncertainty(k * u):f}"


def _exponent(rounded: Decimal) -> int:
    """Power of ten of the last digit shown."""
    exponent = rounded.as_tuple().exponent
    assert isinstance(exponent, int), "rounded numbers are finite"
    return exponent
