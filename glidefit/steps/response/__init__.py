"""Speed against a column of numbers of the assay sheet: points, curves, parameters."""

from glidefit.steps.response.curves import responses
from glidefit.steps.response.points import SheetColumns

__all__ = ["SheetColumns", "responses"]
