"""Bounded number types for settings; checked and exported to the JSON Schema by the shell.

Only type metadata: building a settings value in code does not check it, reading one from a
configuration file does.
"""

from typing import Annotated, Any

from annotated_types import Ge, Gt, Le, Lt, MinLen

Positive = Annotated[float, Gt(0.0)]
"""More than zero; infinity means no limit."""

NonNegative = Annotated[float, Ge(0.0)]
Fraction = Annotated[float, Ge(0.0), Le(1.0)]
PositiveFraction = Annotated[float, Gt(0.0), Le(1.0)]
BelowOne = Annotated[float, Ge(0.0), Lt(1.0)]
InsideUnit = Annotated[float, Gt(0.0), Lt(1.0)]
InsideTwo = Annotated[float, Gt(0.0), Lt(2.0)]
AboveOne = Annotated[float, Gt(1.0)]
MemoryWeight = Annotated[float, Ge(0.02), Le(1.0)]
"""Weight of the newest value in a moving mean; smaller ones forget too slowly for a chart."""

Count = Annotated[int, Ge(0)]
PositiveCount = Annotated[int, Ge(1)]
Name = Annotated[str, MinLen(1)]

STRICT: dict[str, Any] = {
    "extra": "forbid",
    "strict": True,
    "use_attribute_docstrings": True,
}
"""Value of `__pydantic_config__` on every settings class: unknown keys and loose types are errors,
and the string under an attribute is its description. A plain dict, so core imports no pydantic."""
