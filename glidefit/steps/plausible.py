"""Numbers that no gliding assay has: most often a unit is wrong."""

from __future__ import annotations

# Common practice: gliding assays lie between some nm/s and some ten µm/s, frames follow each other
# within a minute, and a position is known to between a nanometre and half a micrometre.
_SLOWEST_UM_S = 0.002
_LONGEST_FRAME_S = 60.0
_NOISE_UM = (0.0005, 0.5)


def implausible(
    *, speed_um_s: float, noise_um: float, frame_s: float, max_speed_um_s: float
) -> tuple[str, ...]:
    """What looks like a wrong unit, in plain words; NaN and a noise of 0 say nothing.

    Parameters
    ----------
    speed_um_s : float
        Typical, of the tracks that advance.
    noise_um : float
        Localization error.
    frame_s : float
    max_speed_um_s : float
        Fastest gliding still believed.
    """
    out = []
    if speed_um_s > max_speed_um_s:
        out.append(
            f"a typical speed of {speed_um_s:.3g} µm/s is beyond what is believed "
            f"(link.max_speed = {max_speed_um_s:g} µm/s): are positions in µm and times in s?"
        )
    if speed_um_s < _SLOWEST_UM_S:
        out.append(
            f"a typical speed of {speed_um_s:.3g} µm/s is slower than gliding: are positions in µm "
            "and times in s?"
        )
    if frame_s > _LONGEST_FRAME_S:
        out.append(f"{frame_s:g} s from frame to frame is long: is it in s, not in ms?")
    if 0 < noise_um < _NOISE_UM[0] or noise_um > _NOISE_UM[1]:
        out.append(
            f"a localization error of {noise_um:.2g} µm is implausible: are positions in µm?"
        )
    return tuple(out)
