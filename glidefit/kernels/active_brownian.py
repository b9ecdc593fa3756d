"""Active Brownian motion in the plane: displacements, headings, pauses, as formulas.

A tracer moves with constant speed along a heading that diffuses. Lengths in µm, times in s,
angles in rad. The formulas are re-derived; `References` name where such models were published.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Below this argument the closed form of `bend` has lost more digits than its series lacks.
_SMALL_BEND = 1e-3
# Below this argument the closed form of the fourth moment has lost more digits than its series.
_SMALL_FOURTH = 0.5
# Power series in y of the two numbers by which exposure changes a curved path (see `gliding_msd`).
_BLUR_AWAY = tuple(2 / math.factorial(2 * j + 4) for j in range(8))  # in y²
_BLUR_HOME = tuple(2 * (-1) ** m / math.factorial(m + 4) for m in range(15))  # in y
_FOURTH = tuple(
    (-1) ** n * (40 * n / 3 - 392 / 9 + 4**n / 18) / math.factorial(n) for n in range(4, 30)
)


def _check(lag: Floats, rotational_diffusion: float) -> None:
    if np.any(lag <= 0):
        raise ValueError(f"lags must be > 0 s, the smallest is {lag.min():g} s")
    if rotational_diffusion < 0:
        raise ValueError(f"rotational_diffusion must be >= 0, is {rotational_diffusion:g} rad²/s")


def _share_going(stop_rate: float, go_rate: float) -> float:
    if stop_rate <= 0 or go_rate <= 0:
        raise ValueError(f"rates must be > 0 1/s, are {stop_rate:g} and {go_rate:g}")
    return go_rate / (stop_rate + go_rate)


def _power_series(coefficients: tuple[float, ...], x: float) -> float:
    total = 0.0
    for coefficient in reversed(coefficients):
        total = total * x + coefficient
    return total


def _bend(u: NDArray[Any]) -> NDArray[Any]:
    small = np.abs(u) < _SMALL_BEND
    if not small.any():
        return np.asarray(2 * (u + np.expm1(-u)) / (u * u))
    series = 1 - u * (1 / 3 - u * (1 / 12 - u / 60))
    if small.all():
        return np.asarray(series)
    safe = np.where(small, 1.0, u)
    return np.where(small, series, 2 * (safe + np.expm1(-safe)) / (safe * safe))


def bend(u: Floats) -> Floats:
    """Share of the squared length that a bending path keeps end to end.

    ``2 (u - 1 + exp(-u)) / u²``: 1 for a straight path (u = 0), 2/u for a long one.

    Parameters
    ----------
    u : (n,) array
        Length of the path over the length (or time over the time) in which its heading is
        forgotten; any sign, above -700.

    Returns
    -------
    (n,) array
        Relative error below 1e-12.
    """
    result: Floats = _bend(u)
    return result


def mean_squared_displacement(
    lag: Floats,
    *,
    speed: float,
    rotational_diffusion: float,
    diffusion: float = 0.0,
    localization_error: float = 0.0,
) -> Floats:
    """Mean squared displacement after each lag, frames without exposure.

    ``(speed lag)² bend(rotational_diffusion lag) + 4 diffusion lag + 4 localization_error²``

    Parameters
    ----------
    lag : (n,) array
        Lags in s, all > 0.
    speed : float
        In µm/s.
    rotational_diffusion : float
        In rad²/s, >= 0; 0 is a straight path.
    diffusion : float
        Translational diffusion in µm²/s, the same in all directions.
    localization_error : float
        Standard deviation of one measured coordinate, in µm.

    Returns
    -------
    (n,) array
        In µm²; relative error below 1e-10.

    Raises
    ------
    ValueError
        For a lag that is not positive or a negative rotational diffusion.

    References
    ----------
    Howse et al., Phys. Rev. Lett. 99, 048102 (2007); Bechinger et al., Rev. Mod. Phys. 88,
    045006 (2016).
    """
    _check(lag, rotational_diffusion)
    active = (speed * lag) ** 2 * bend(rotational_diffusion * lag)
    return active + 4 * diffusion * lag + 4 * localization_error**2


def _blur_factors(y: float) -> tuple[float, float]:
    """``exp(-y) (S - 1) / y²`` and ``(bend(y) - 1 + y/3) / y²``, S = (sinh(y/2) / (y/2))²."""
    if abs(y) <= 1:
        return math.exp(-y) * _power_series(_BLUR_AWAY, y * y), _power_series(_BLUR_HOME, y)
    fall = math.expm1(-y)
    away = (fall * fall / y**2 - math.exp(-y)) / y**2
    return away, (2 * (y + fall) / y**2 - 1 + y / 3) / y**2


def gliding_msd(
    lag: Floats,
    *,
    speed: float,
    rotational_diffusion: float,
    longitudinal_diffusion: float,
    localization_variance: float,
    exposure: float,
) -> Floats:
    """Mean squared displacement of a gliding filament filmed with an exposure.

    It diffuses along its heading only, and each frame records the mean over the exposure T::

        E[M(lag + w)] - E[M(|w|)] + 2 longitudinal_diffusion (lag - T/3) + 4 localization_variance

    with M(t) = (speed t)² bend(rotational_diffusion t) and w triangular on [-T, T]. Both
    expectations are elementary; they are arranged as M(lag) plus a small rest, so that nothing
    cancels for nearly straight paths.

    Parameters
    ----------
    lag : (n,) array
        Lags in s, all > 0.
    speed : float
        In µm/s.
    rotational_diffusion : float
        In rad²/s, of any sign: estimates without bias may fall below 0, where the formula holds.
    longitudinal_diffusion : float
        In µm²/s, of any sign.
    localization_variance : float
        Variance of one measured coordinate in µm², of any sign.
    exposure : float
        In s, from 0 to the smallest lag.

    Returns
    -------
    (n,) array
        In µm²; relative error of the active part below 1e-10 for rotational_diffusion × lag
        between -3 and 10.

    Raises
    ------
    ValueError
        For a lag that is not positive, a negative exposure or one longer than the smallest lag.

    References
    ----------
    Berglund, Phys. Rev. E 82, 011917 (2010), for blur in diffusion; here for any motion with
    stationary increments.
    """
    shortest = lag.min()
    if shortest <= 0:
        raise ValueError(f"lags must be > 0 s, the smallest is {shortest:g} s")
    if not 0 <= exposure <= shortest:
        raise ValueError(f"exposure must be from 0 to {shortest:g} s, is {exposure:g} s")
    x = rotational_diffusion * lag
    y = rotational_diffusion * exposure
    away, home = _blur_factors(y)
    active = lag * lag * _bend(x) + (2 * exposure**2) * (away * np.exp(y - x) - home)
    offset = 4 * localization_variance - 2 * longitudinal_diffusion * exposure / 3
    result: Floats = speed**2 * active + (2 * longitudinal_diffusion) * lag + offset
    return result


def circling_msd(
    lag: Floats,
    *,
    speed: float,
    rotational_diffusion: float,
    turning_rate: float,
    diffusion: float = 0.0,
    localization_error: float = 0.0,
) -> Floats:
    """Mean squared displacement of a tracer whose heading also turns at a constant rate.

    ``Re bend(z)`` takes the place of ``bend``, z = (rotational_diffusion + i turning_rate) lag;
    the sign of the turning rate (rad/s) does not matter. Other parameters, result and errors as
    in `mean_squared_displacement`.

    References
    ----------
    van Teeffelen & Löwen, Phys. Rev. E 78, 020101 (2008), for the model.
    """
    _check(lag, rotational_diffusion)
    kept = _bend(complex(rotational_diffusion, turning_rate) * lag).real
    result: Floats = (speed * lag) ** 2 * kept + 4 * diffusion * lag + 4 * localization_error**2
    return result


def long_time_diffusion(
    *,
    speed: float,
    rotational_diffusion: float,
    diffusion: float = 0.0,
    turning_rate: float = 0.0,
) -> float:
    """Diffusion seen long after the heading is forgotten, MSD / (4 lag), in µm²/s.

    ``diffusion + speed² D_r / (2 (D_r² + turning_rate²))`` with D_r the rotational diffusion.

    Raises
    ------
    ValueError
        Unless the rotational diffusion is positive.
    """
    if rotational_diffusion <= 0:
        raise ValueError(f"rotational_diffusion must be > 0, is {rotational_diffusion:g} rad²/s")
    forgetting = rotational_diffusion + turning_rate**2 / rotational_diffusion
    return diffusion + speed**2 / (2 * forgetting)


def heading_correlation(
    lag: Floats, *, rotational_diffusion: float, turning_rate: float = 0.0
) -> Floats:
    """Mean cosine of the change of heading after each lag (n,) in s, without unit.

    ``cos(turning_rate lag) exp(-rotational_diffusion lag)``. Errors as in
    `mean_squared_displacement`.
    """
    _check(lag, rotational_diffusion)
    result: Floats = np.cos(turning_rate * lag) * np.exp(-rotational_diffusion * lag)
    return result


def mean_advance(lag: Floats, *, speed: float, rotational_diffusion: float) -> Floats:
    """Mean displacement along the first heading after each lag (n,) in s, in µm.

    ``speed (1 - exp(-D_r lag)) / D_r``; ``speed lag`` for a straight path. Errors as in
    `mean_squared_displacement`.
    """
    _check(lag, rotational_diffusion)
    if rotational_diffusion == 0:
        return speed * lag
    result: Floats = -speed * np.expm1(-rotational_diffusion * lag) / rotational_diffusion
    return result


def fourth_moment(
    lag: Floats, *, speed: float, rotational_diffusion: float, diffusion: float = 0.0
) -> Floats:
    """Mean fourth power of the displacement after each lag, in µm⁴; no noise, no turning.

    With x = D_r lag and F = 8x² - 30x + 87/2 - (40x/3 + 392/9) exp(-x) + exp(-4x)/18::

        (speed lag)⁴ F / x⁴ + 16 diffusion speed² lag³ bend(x) + 32 (diffusion lag)²

    Parameters, shapes and errors as in `mean_squared_displacement`; relative error below 1e-10.

    References
    ----------
    ten Hagen, van Teeffelen & Löwen, J. Phys.: Condens. Matter 23, 194119 (2011), for the model.
    """
    _check(lag, rotational_diffusion)
    x = rotational_diffusion * lag
    safe = np.maximum(x, _SMALL_FOURTH)
    closed = 8 * safe**2 - 30 * safe + 43.5 - (40 * safe / 3 + 392 / 9) * np.exp(-safe)
    closed = (closed + np.exp(-4 * safe) / 18) / safe**4
    series = np.polyval(_FOURTH[::-1], np.minimum(x, _SMALL_FOURTH))
    active = (speed * lag) ** 4 * np.where(x < _SMALL_FOURTH, series, closed)
    mixed = 16 * diffusion * speed**2 * lag**3 * bend(x)
    result: Floats = active + mixed + 32 * (diffusion * lag) ** 2
    return result


def excess_kurtosis(
    lag: Floats, *, speed: float, rotational_diffusion: float, diffusion: float = 0.0
) -> Floats:
    """⟨r⁴⟩/⟨r²⟩² - 2 of the displacement: -1 straight, 0 diffusing, > 0 for mixed populations.

    Parameters, shapes and errors as in `fourth_moment`.
    """
    fourth = fourth_moment(
        lag, speed=speed, rotational_diffusion=rotational_diffusion, diffusion=diffusion
    )
    second = mean_squared_displacement(
        lag, speed=speed, rotational_diffusion=rotational_diffusion, diffusion=diffusion
    )
    return fourth / second**2 - 2


def pausing_msd_turning(
    lag: Floats, *, speed: float, rotational_diffusion: float, stop_rate: float, go_rate: float
) -> Floats:
    """Mean squared displacement (µm²) with random pauses in which the heading goes on diffusing.

    The velocity correlation is ``speed² p (p + (1 - p) exp(-K lag)) exp(-D_r lag)`` with the
    share of time going p = go_rate / K, K = stop_rate + go_rate (1/s, both > 0). Other parameters
    and errors as in `mean_squared_displacement`.
    """
    _check(lag, rotational_diffusion)
    going = _share_going(stop_rate, go_rate)
    change = stop_rate + go_rate
    kept = going * bend(rotational_diffusion * lag)
    kept = kept + (1 - going) * bend((rotational_diffusion + change) * lag)
    return (speed * lag) ** 2 * going * kept


def pausing_msd_frozen(
    lag: Floats, *, speed: float, rotational_diffusion: float, stop_rate: float, go_rate: float
) -> Floats:
    """Mean squared displacement (µm²) with random pauses that freeze the heading.

    The velocity correlation is speed² p times the first element of exp(A lag), A the matrix
    ((-stop_rate - D_r, go_rate), (stop_rate, -go_rate)): two exponentials. Parameters and errors
    as in `pausing_msd_turning`.
    """
    _check(lag, rotational_diffusion)
    going = _share_going(stop_rate, go_rate)
    leaving = stop_rate + rotational_diffusion
    root = math.hypot(leaving - go_rate, 2 * math.sqrt(stop_rate * go_rate))
    fast = (leaving + go_rate + root) / 2
    slow = rotational_diffusion * go_rate / fast
    weight = (fast - leaving) / root
    kept = weight * bend(slow * lag) + (1 - weight) * bend(fast * lag)
    return (speed * lag) ** 2 * going * kept


def pausing_diffusion_turning(
    *, speed: float, rotational_diffusion: float, stop_rate: float, go_rate: float
) -> float:
    """Long-time diffusion (µm²/s) with pauses in which the heading goes on diffusing.

    ``(speed² p / 2) (p / D_r + (1 - p) / (D_r + K))``, in the notation of `pausing_msd_turning`.
    """
    going = _share_going(stop_rate, go_rate)
    change = stop_rate + go_rate
    memory = going / rotational_diffusion + (1 - going) / (rotational_diffusion + change)
    return speed**2 * going * memory / 2


def pausing_diffusion_frozen(
    *, speed: float, rotational_diffusion: float, stop_rate: float, go_rate: float
) -> float:
    """Long-time diffusion (µm²/s) with pauses that freeze the heading: p speed² / (2 D_r)."""
    going = _share_going(stop_rate, go_rate)
    return going * speed**2 / (2 * rotational_diffusion)


def turning_variance(
    steps: NDArray[np.int64],
    *,
    speed: float,
    rotational_diffusion: float,
    frame_interval: float,
    exposure: float = 0.0,
    localization_error: float = 0.0,
    diffusion: float = 0.0,
) -> Floats:
    """Variance of the turn between the frame-to-frame displacements n and n + k, in rad².

    The direction of a displacement is the heading averaged over two exposures and the time
    between. To first order in each term, with δ the frame interval and a = exposure / δ::

        k = 1:  2 D_r δ (2/3 - a²/6 + a³/20)     + (6 σ² + (4 - 2a) D δ) / (speed δ)²
        k > 1:  2 D_r δ (k - 1/3 - a²/6 + a³/30) + (4 σ² + (4 - 4a/3) D δ) / (speed δ)²

    Parameters
    ----------
    steps : (n,) array of int
        Distances k in frames, all >= 1.
    speed, rotational_diffusion : float
        In µm/s and rad²/s; D_r δ << 1.
    frame_interval, exposure : float
        In s; exposure from 0 to the frame interval.
    localization_error : float
        σ of a measured coordinate across the heading, in µm; << speed δ.
    diffusion : float
        D across the heading, in µm²/s.

    Raises
    ------
    ValueError
        For a distance below 1 or an exposure outside 0 to the frame interval.
    """
    if np.any(steps < 1):
        raise ValueError(f"distances must be >= 1 frame, the smallest is {steps.min()}")
    if not 0 <= exposure <= frame_interval:
        raise ValueError(f"exposure must be from 0 to {frame_interval:g} s, is {exposure:g} s")
    a = exposure / frame_interval
    next_one = steps == 1
    turned = np.where(next_one, 2 / 3 - a**2 / 6 + a**3 / 20, steps - 1 / 3 - a**2 / 6 + a**3 / 30)
    noise = np.where(next_one, 6, 4) * localization_error**2
    sideways = np.where(next_one, 4 - 2 * a, 4 - 4 * a / 3) * diffusion * frame_interval
    across = (noise + sideways) / (speed * frame_interval) ** 2
    result: Floats = 2 * rotational_diffusion * frame_interval * turned + across
    return result


def rms_step_speed(
    *,
    speed: float,
    rotational_diffusion: float,
    frame_interval: float,
    localization_error: float = 0.0,
    diffusion: float = 0.0,
) -> float:
    """Root mean square of frame-to-frame displacement over frame interval, in µm/s.

    What a notebook without noise correction shows: too fast by noise, too slow by bending.
    Parameters and errors as in `mean_squared_displacement`, frames without exposure.
    """
    msd = mean_squared_displacement(
        np.array([frame_interval]),
        speed=speed,
        rotational_diffusion=rotational_diffusion,
        diffusion=diffusion,
        localization_error=localization_error,
    )
    return math.sqrt(float(msd[0])) / frame_interval
