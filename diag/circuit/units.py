"""Numbers with units, as people write them."""

from __future__ import annotations

import re
from functools import cache
from typing import Any

from diag.circuit.reading import brief
from diag.errors import UsageError

NUMBER = re.compile(
    r"^([-+]?(?:\d{1,20}\.?\d{0,20}|\.\d{1,20})(?:[eE][-+]?\d{1,3})?)\s*([^\d\s].*)?$", re.ASCII
)
_UNIT = re.compile(r"^[a-zA-Z°%µ][a-zA-Z_°%µ]*(?: ?/ ?[a-zA-Z]+)?$")
"""A plain unit, such as psi, degC or L/h; anything more is no unit a gauge is marked in."""
_SHORT = {
    "c": "degC", "°c": "degC", "celsius": "degC", "f": "degF", "°f": "degF", "l": "litre",
    "ltr": "litre", "liter": "litre", "litres": "litre", "liters": "litre", "qt": "quart",
    "qts": "quart", "psig": "psi", "psid": "psi", "%": "percent", "gal": "gallon",
}  # fmt: skip


def split_number(text: str) -> tuple[float, str] | None:
    """`52 psi` as (52.0, "psi"), the unit empty where there is none; None if no number."""
    match = NUMBER.match(text.strip())
    return (float(match[1]), (match[2] or "").strip()) if match else None


def in_unit(number: float, unit: str, wanted: str, where: str) -> float:
    """`number` converted from `unit` to `wanted`.

    Raises:
        UsageError: unknown unit, or one of another kind.
    """
    ours, target = _SHORT.get(unit.lower(), unit), _SHORT.get(wanted.lower(), wanted)
    if ours == target:
        return number
    unknown = UsageError(f"{where}: unknown unit {brief(unit)}; accepted: {wanted}")
    if not _UNIT.match(unit):
        raise unknown
    registry, pint = _registry()
    try:
        return float(registry.Quantity(number, ours).to(target).m)
    except pint.errors.DimensionalityError:
        raise UsageError(f"{where}: {unit} is not a unit of this reading ({wanted})") from None
    except Exception:  # the library's parser raises types of its own on odd words
        raise unknown from None


@cache
def _registry() -> tuple[Any, Any]:
    # Imported on first use: it costs a good part of a second.
    import pint

    return pint.UnitRegistry(), pint
