"""Every quantity of a result, declared once: key, symbol, unit, label, formula, meaning."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """One quantity: its key in files and how it is written on a page."""

    key: str
    symbol: str
    unit: str  # "" for a pure number
    label: str
    formula: str  # "" if it is a parameter of the model
    meaning: str


_ALL = (
    Quantity(
        key="speed_um_s",
        symbol="v",
        unit="µm/s",
        label="speed",
        formula="",
        meaning="Self-propulsion speed while running, localization error and blur removed; "
        "the mean over the filaments present at a moment.",
    ),
    Quantity(
        key="rotational_diffusion_rad2_s",
        symbol="D_r",
        unit="rad²/s",
        label="rotational diffusion",
        formula="⟨Δθ²⟩ = 2 D_r t",
        meaning="How fast the heading forgets itself; while running, where filaments pause.",
    ),
    Quantity(
        key="persistence_length_um",
        symbol="ℓ",
        unit="µm",
        label="persistence length",
        formula="v / D_r",
        meaning="Active-Brownian convention: ⟨cos Δθ⟩ = exp(−s/ℓ) along the path s.",
    ),
    Quantity(
        key="path_persistence_length_um",
        symbol="P",
        unit="µm",
        label="path persistence length",
        formula="v / (2 D_r)",
        meaning="Worm-like-chain convention in two dimensions: ⟨cos Δθ⟩ = exp(−s/2P).",
    ),
    Quantity(
        key="motile_fraction",
        symbol="f",
        unit="",
        label="motile fraction",
        formula="filament-frames gliding / filament-frames seen",
        meaning="Share of the filaments present at a moment that glide.",
    ),
    Quantity(
        key="ever_moved_fraction",
        symbol="",
        unit="",
        label="ever moved",
        formula="tracks that moved / tracks seen",
        meaning="Share of tracks that moved by more than noise at any time; "
        "it favours fast filaments, which cross the field more often.",
    ),
    Quantity(
        key="smallest_speed_um_s",
        symbol="",
        unit="µm/s",
        label="smallest speed noticed",
        formula="",
        meaning="A track of median length that is slower than this reads as stuck.",
    ),
    Quantity(
        key="translational_diffusion_um2_s",
        symbol="D∥",
        unit="µm²/s",
        label="longitudinal diffusion",
        formula="MSD gains 2 D∥ t",
        meaning="Diffusion along the heading; trades against localization error, "
        "not to be over-interpreted.",
    ),
    Quantity(
        key="localization_error_um",
        symbol="σ",
        unit="µm",
        label="localization error",
        formula="MSD gains 4 σ²",
        meaning="Standard deviation of one measured coordinate of a moving tracer.",
    ),
    Quantity(
        key="speed_spread_um_s",
        symbol="",
        unit="µm/s",
        label="spread of speed",
        formula="",
        meaning="Standard deviation of the speed from filament to filament within a chamber, "
        "measurement error removed.",
    ),
    Quantity(
        key="mean_speed_um_s",
        symbol="",
        unit="µm/s",
        label="mean speed",
        formula="v × running fraction",
        meaning="Speed averaged over runs and pauses.",
    ),
    Quantity(
        key="running_fraction",
        symbol="",
        unit="",
        label="running fraction",
        formula="go rate / (stop rate + go rate)",
        meaning="Share of the time that a gliding filament runs rather than pauses.",
    ),
    Quantity(
        key="stop_rate_per_s",
        symbol="",
        unit="1/s",
        label="stop rate",
        formula="1 / mean run time",
        meaning="Pauses that begin per second of running.",
    ),
    Quantity(
        key="go_rate_per_s",
        symbol="",
        unit="1/s",
        label="go rate",
        formula="1 / mean pause time",
        meaning="Pauses that end per second of pause.",
    ),
    Quantity(
        key="turning_rate_rad_s",
        symbol="ω",
        unit="rad/s",
        label="turning rate",
        formula="",
        meaning="Mean rate of turning of circling paths; positive is clockwise on the screen.",
    ),
    Quantity(
        key="sideways_diffusion_um2_s",
        symbol="D⊥",
        unit="µm²/s",
        label="sideways diffusion",
        formula="MSD gains 2 D⊥ t",
        meaning="Diffusion across the heading, of free swimmers; a filament follows its path.",
    ),
    Quantity(
        key="further_error_along_um",
        symbol="",
        unit="µm",
        label="further error along",
        formula="√(σ∥² − σ²)",
        meaning="What the localization error has more along the heading than across it.",
    ),
    Quantity(
        key="diffusion_um2_s",
        symbol="D",
        unit="µm²/s",
        label="free diffusion",
        formula="MSD = 4 D t",
        meaning="Diffusion of filaments that nothing drives, mean of all directions.",
    ),
    Quantity(
        key="frame_speed_um_s",
        symbol="",
        unit="µm/s",
        label="frame-to-frame speed",
        formula="mean |Δr| / Δt",
        meaning="The conventional number, for comparison with older notebooks: it counts "
        "localization error as motion, so it grows with the frame rate.",
    ),
)

QUANTITIES: dict[str, Quantity] = {quantity.key: quantity for quantity in _ALL}
