"""A magnification check as a record holds it."""

from __future__ import annotations

import math
from typing import Any, cast

from fringespan.magnification.check import MagnificationCheck
from fringespan.record.document import plain_values

__all__ = ["magnification_values"]


def magnification_values(check: MagnificationCheck) -> dict[str, Any]:
    """Return a magnification check as nested dictionaries and lists, in the form of the record's schema."""
    document = {
        "scale": check.scale,
        "scale_uncertainty": check.scale_uncertainty,
        "shear": check.shear,
        "shear_uncertainty": check.shear_uncertainty,
        "reference": check.reference_id,
        "reference_name": check.reference,
        "nominal_pixel_size_nm": check.nominal_pixel_size_nm,
        "pixel_size_nm": check.pixel_size_nm,
        "temperature_c": check.temperature_c,
        "temperature_stated": check.temperature_stated,
        "reflections": check.reflections,
        "regions": check.regions,
        "budget": [
            {
                "quantity": budget.quantity,
                "source": line.source,
                "standard_uncertainty": line.standard_uncertainty,
                "sensitivity": line.sensitivity,
                "degrees_of_freedom": _finite(line.degrees_of_freedom),
                "note": line.note,
            }
            for budget in check.budgets
            for line in budget.lines
        ],
        "degrees_of_freedom": {budget.quantity: _finite(budget.degrees_of_freedom) for budget in check.budgets},
        "coverage": check.coverage,
        "coverage_factor": check.coverage_factor,
        "expanded_uncertainty": check.expanded_uncertainty,
        "tolerance": check.tolerance,
        "acceptance": check.acceptance,
        "verdict": check.verdict,
        "sentence": check.sentence,
        "pictures": check.pictures,
        "cautions": check.cautions,
    }
    return cast("dict[str, Any]", plain_values(document, "magnification"))


def _finite(degrees: float) -> float | None:
    return degrees if math.isfinite(degrees) else None
