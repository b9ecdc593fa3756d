"""Fit the active-Brownian model to the kept tracks of one condition, chamber by chamber."""

from glidefit.steps.fit.condition import ConditionFit, fit
from glidefit.steps.fit.evidence_columns import SCALARS, CurveColumns
from glidefit.steps.fit.propulsion import with_floating
from glidefit.steps.fit.track_diffusion import track_diffusions

__all__ = ["SCALARS", "ConditionFit", "CurveColumns", "fit", "track_diffusions", "with_floating"]
