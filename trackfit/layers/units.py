"""Units as CF files write them: one conversion, offsets (degC, K) included."""

from __future__ import annotations

from typing import Any

import numpy as np
import pint
from cf_xarray.units import units as registry

from trackfit.layers.layer import LayerRequest

CURRENT_UNIT = "km/h"


def convert(
    values: np.ndarray, unit: str | None, to_unit: str | None, request: LayerRequest
) -> tuple[np.ndarray, str]:
    """Return values in the wanted unit, and that unit.

    Parameters
    ----------
    values
        Any shape.
    unit
        The unit the values have, None if nothing says it.
    to_unit
        The unit wanted; None keeps values and unit as they are.

    Raises
    ------
    LayerError
        If a conversion is asked for and the unit is missing, not understood or of another kind.
    """
    if to_unit is None or (unit is not None and unit.strip() == to_unit.strip()):
        return values, unit or ""
    if unit is None or not unit.strip():
        raise request.fault(
            f"the file gives no unit, so values cannot become {to_unit}; "
            f"set layers.{request.name}.unit to the unit they have (for example 'm s-1')"
        )
    scale, source = _parsed(unit, "unit", request)
    to_scale, target = _parsed(to_unit, "to_unit", request)
    try:
        converted = registry.Quantity(np.asarray(values, float) * scale, source).to(target)
    except pint.DimensionalityError as fault:
        raise request.fault(
            f"unit '{unit}' cannot become '{to_unit}': another kind of unit"
        ) from fault
    return np.asarray(converted.magnitude) / to_scale, to_unit


def _parsed(text: str, key: str, request: LayerRequest) -> tuple[float, Any]:
    """Return a number and a unit: CF allows '1e-3' and '0.01 m'."""
    try:
        try:
            return 1.0, registry.parse_units(text)
        except ValueError:
            quantity = registry.parse_expression(text)
            return float(quantity.magnitude), quantity.units
    # The parser evaluates text, so a wrong one can raise nearly anything.
    except Exception as fault:
        raise request.fault(
            f"unit '{text}' is not understood; set layers.{request.name}.{key} "
            "to one that is (for example 'm', 'degC', 'm s-1')"
        ) from fault
