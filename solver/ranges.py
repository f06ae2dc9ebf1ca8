"""The error raised where a formula is asked outside the range its source states."""

from __future__ import annotations

from math import isfinite

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]
# A wavelength that is converted between media and back may miss a limit that it met by a rounding error.
_SLACK = 1e-9


class OutOfRangeError(ValueError):
    """A value outside the range in which a constant is known. Carries what was asked and the limits."""

    def __init__(self, material: str, what: str, value: float, low: float, high: float, unit: str) -> None:
        self.material, self.what, self.value, self.low, self.high, self.unit = material, what, value, low, high, unit
        limits = f"{low:g} to {high:g}" if isfinite(high) else f"{low:g}"
        super().__init__(f"{material} is known for {what} from {limits} {unit}, not at {value:g} {unit}")

    def __reduce__(self) -> tuple[type[OutOfRangeError], tuple[str, str, float, float, float, str]]:
        return OutOfRangeError, (self.material, self.what, self.value, self.low, self.high, self.unit)


def within(
    values: ArrayLike, low: float, high: float, *, material: str, what: str, unit: str, scale: float = 1.0
) -> Array:
    """The values, as floats held to [low, high]. Raises OutOfRangeError for the first that lies outside or is not a
    number; its message has numbers times `scale`, in `unit`."""
    array = np.asarray(values, dtype=float)
    slack_low, slack_high = _SLACK * abs(low), 0.0 if np.isinf(high) else _SLACK * abs(high)
    outside = ~((array >= low - slack_low) & (array <= high + slack_high))
    if outside.any():
        first = float(array[outside].flat[0])
        raise OutOfRangeError(material, what, first * scale, low * scale, high * scale, unit)
    return np.asarray(np.clip(array, low, high), dtype=float)
