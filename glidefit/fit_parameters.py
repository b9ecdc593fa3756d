"""Parameters of the likelihood that are known, bounded or freed, as a person writes them."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True, kw_only=True)
class FitParameters:
    """What is held, bounded and freed; names and units as in the kernels.

    Parameters
    ----------
    fixed : dict of str: float
    limits : dict of str: (float, float)
        Lowest and highest; infinite where open.
    freed : tuple of str
        Parameters that the model leaves at 0 by itself.
    held : tuple of str
        Names in files of those that are fixed.
    """

    fixed: dict[str, float] = field(default_factory=dict)
    limits: dict[str, tuple[float, float]] = field(default_factory=dict)
    freed: tuple[str, ...] = ()
    held: tuple[str, ...] = ()


def _as_it_is(value: float) -> float:
    return value


def _squared(value: float) -> float:
    return value * abs(value)


# Name in files, name in the kernels, and how a value becomes one there.
_KNOWN: dict[str, tuple[str, Callable[[float], float]]] = {
    "speed_um_s": ("speed", _as_it_is),
    "rotational_diffusion_rad2_s": ("rotational_diffusion", _as_it_is),
    "translational_diffusion_um2_s": ("longitudinal_diffusion", _as_it_is),
    "sideways_diffusion_um2_s": ("sideways_diffusion", _as_it_is),
    "localization_error_um": ("localization_variance", _squared),
    "further_error_along_um": ("error_variance_along", _squared),
    "speed_spread_um_s": ("speed_variance", _squared),
    "turning_rate_rad_s": ("turning_rate", _as_it_is),
    "turning_rate_spread_rad_s": ("turning_rate_variance", _squared),
    "stop_rate_per_s": ("stop_rate", _as_it_is),
    "go_rate_per_s": ("go_rate", _as_it_is),
}
_FREED = ("sideways_diffusion_um2_s", "further_error_along_um")
_ABOVE_ZERO = ("speed_um_s", "localization_error_um", "stop_rate_per_s", "go_rate_per_s")

_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_EQUAL = re.compile(rf"(\w+)\s*=\s*({_NUMBER}|free)")
_BELOW = re.compile(rf"(?:({_NUMBER})\s*<=?\s*)?(\w+)(?:\s*<=?\s*({_NUMBER}))?")
_ABOVE = re.compile(rf"(\w+)\s*>=?\s*({_NUMBER})")

EXAMPLE = "sideways_diffusion_um2_s = free, 0.001 < rotational_diffusion_rad2_s < 0.1"


def parse(text: str) -> FitParameters:
    """Read ``name = value``, ``name = free``, ``low < name < high``, separated by commas.

    Raises
    ------
    ValueError
        With what is expected, in words for the person who wrote it.
    """
    fixed: dict[str, float] = {}
    limits: dict[str, tuple[float, float]] = {}
    freed: list[str] = []
    held: list[str] = []
    for part in text.split(","):
        name, low, high = _read(part.strip())
        if name not in _KNOWN:
            raise ValueError(f"{name!r} is none of {', '.join(_KNOWN)}")
        inside, convert = _KNOWN[name]
        if inside in fixed or inside in limits or inside in freed:
            raise ValueError(f"{name} is given twice")
        if low is None:
            if name not in _FREED:
                raise ValueError(f"{name} is fitted anyway; free can be {' and '.join(_FREED)}")
            freed.append(inside)
            continue
        _check(name, low, high)
        if low == high:
            fixed[inside] = convert(low)
            held.append(name)
        else:
            limits[inside] = convert(low), convert(high)
            if name in _FREED:
                freed.append(inside)
    return FitParameters(fixed=fixed, limits=limits, freed=tuple(freed), held=tuple(held))


def _read(part: str) -> tuple[str, float | None, float]:
    """Name, lowest and highest value; no lowest for ``free``."""
    if match := _EQUAL.fullmatch(part):
        if match[2] == "free":
            return match[1], None, math.inf
        return match[1], float(match[2]), float(match[2])
    if match := _ABOVE.fullmatch(part):
        return match[1], float(match[2]), math.inf
    if (match := _BELOW.fullmatch(part)) and (match[1] or match[3]):
        low = float(match[1]) if match[1] else -math.inf
        return match[2], low, float(match[3]) if match[3] else math.inf
    raise ValueError(f"cannot read {part!r}; write for example: {EXAMPLE}")


def _check(name: str, low: float, high: float) -> None:
    if low > high:
        raise ValueError(f"{name} cannot lie between {low:g} and {high:g}: the first is larger")
    if name == "turning_rate_rad_s":
        return
    if high < 0 or (math.isfinite(low) and low < 0):
        raise ValueError(f"{name} cannot be below 0")
    if name in _ABOVE_ZERO and (high == 0 or low == high == 0):
        raise ValueError(f"{name} must be above 0")
