"""Options with units: what an estimator, problem or condition lets the user set.

A class decorated with `options` is a frozen, validated dataclass whose fields are the YAML options.
Inside the program every value is SI. In YAML a field with a unit is ``number unit`` from a closed
list, or the number alone under a key with the unit appended (``range_sigma_m: 10``).
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated, Any, dataclass_transform

import pydantic
from pydantic import ConfigDict, Field
from pydantic_core import PydanticCustomError, core_schema

from flyoff.registry import discover

__all__ = [
    "UNITS",
    "Count",
    "Flag",
    "Fraction",
    "NonNegative",
    "Number",
    "OneOf",
    "Positive",
    "Unit",
    "convert",
    "options",
    "suffix_units",
]

G0 = 9.80665  # m/s^2, standard gravity (3rd CGPM, 1901)
_DEG = math.pi / 180

# unit -> (dimension, factor to SI)
UNITS: dict[str, tuple[str, float]] = {
    "1": ("ratio", 1.0), "%": ("ratio", 0.01),
    "m": ("length", 1.0), "km": ("length", 1e3), "cm": ("length", 1e-2), "mm": ("length", 1e-3),
    "s": ("time", 1.0), "ms": ("time", 1e-3), "min": ("time", 60.0), "h": ("time", 3600.0),
    "rad": ("angle", 1.0), "mrad": ("angle", 1e-3), "deg": ("angle", _DEG),
    "rad/s": ("angular rate", 1.0), "mrad/s": ("angular rate", 1e-3),
    "deg/s": ("angular rate", _DEG), "deg/h": ("angular rate", _DEG / 3600),
    "m/s": ("speed", 1.0), "km/h": ("speed", 1 / 3.6), "cm/s": ("speed", 1e-2),
    "mm/s": ("speed", 1e-3),
    "m/s^2": ("acceleration", 1.0), "g": ("acceleration", G0), "mg": ("acceleration", 1e-3 * G0),
    "ug": ("acceleration", 1e-6 * G0),
    "T": ("magnetic field", 1.0), "uT": ("magnetic field", 1e-6), "nT": ("magnetic field", 1e-9),
    "Hz": ("frequency", 1.0), "kHz": ("frequency", 1e3), "1/s": ("frequency", 1.0),
    "rad/s/sqrt(Hz)": ("rate noise density", 1.0),
    "deg/s/sqrt(Hz)": ("rate noise density", _DEG),
    "deg/sqrt(h)": ("rate noise density", _DEG / 60),
    "m/s^2/sqrt(Hz)": ("acceleration noise density", 1.0),
    "ug/sqrt(Hz)": ("acceleration noise density", 1e-6 * G0),
    "rad/s^2/sqrt(Hz)": ("rate random walk", 1.0),
    "deg/s^2/sqrt(Hz)": ("rate random walk", _DEG),
    "m/s^3/sqrt(Hz)": ("acceleration random walk", 1.0),
    "m^2/s^3": ("acceleration density", 1.0),
    "rad^2/s^3": ("angular acceleration density", 1.0),
}  # fmt: skip

_NUMBER = re.compile(r"^\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(\S.*?)?\s*$")


def suffix_units() -> dict[str, str]:
    """Key suffix -> unit: ``m`` -> m, ``deg_s`` -> deg/s and so on."""
    out = {}
    for unit in UNITS:
        token = unit.replace("sqrt(", "sqrt").replace(")", "").replace("%", "percent")
        token = re.sub(r"[/^]", "_", token)
        if token != "1":
            out[token] = unit
    return out


def convert(text: str, unit: str) -> float:
    """Parse ``number unit`` into SI, demanding the dimension of `unit`.

    Raises
    ------
    ValueError
        With the rule that was broken.
    """
    match = _NUMBER.match(text)
    dimension = UNITS[unit][0]
    wanted = [u for u, (d, _) in UNITS.items() if d == dimension]
    if not match:
        raise ValueError(f"must be a number with a unit of {dimension} ({', '.join(wanted)})")
    got = match[2] or "1"
    if got not in UNITS or UNITS[got][0] != dimension:
        raise ValueError(f"must have a unit of {dimension} ({', '.join(wanted)})")
    value = float(match[1]) * UNITS[got][1]
    if not math.isfinite(value):
        raise ValueError("must be a finite number")
    return value


@dataclass(frozen=True)
class Unit:
    """Annotation of a field: the SI value is stored; YAML gives ``number unit``."""

    unit: str

    def __get_pydantic_core_schema__(self, source: Any, handler: Any) -> Any:
        def before(value: Any, info: core_schema.ValidationInfo) -> Any:
            if isinstance(value, str):
                try:
                    return convert(value, self.unit)
                except ValueError as why:
                    raise PydanticCustomError("unit", str(why).replace("{", "{{")) from None
            from_file = (info.context or {}).get("from_file", False)
            if from_file and not isinstance(value, int | float):
                raise PydanticCustomError(
                    "unit", f"must be a number with a unit of {UNITS[self.unit][0]}"
                )
            if from_file and UNITS[self.unit][0] != "ratio" and value != 0:
                hint = f"a unit, as in `{value} {self.unit}`"
                raise PydanticCustomError("unit", f"needs {hint}")
            return value

        return core_schema.with_info_before_validator_function(before, handler(source))

    def __get_pydantic_json_schema__(self, schema: Any, handler: Any) -> dict[str, Any]:
        out: dict[str, Any] = handler(schema)
        out["unit"] = self.unit
        if "type" in out:  # in a file it is text with a unit
            out["type"] = ["number", "string"]
        return out


@dataclass(frozen=True)
class OneOf:
    """Annotation of a field that holds one of the registered classes, chosen by a tag key."""

    kind: str
    tag: str

    def __get_pydantic_core_schema__(self, source: Any, handler: Any) -> Any:
        classes = discover(self.kind)
        tagged = core_schema.tagged_union_schema(
            {name: handler.generate_schema(cls) for name, cls in classes.items()}, self.tag
        )

        def wrap(value: Any, inner: Any) -> Any:
            return value if isinstance(value, tuple(classes.values())) else inner(value)

        return core_schema.no_info_wrap_validator_function(wrap, tagged)


Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[float, Field(strict=True, gt=0, allow_inf_nan=False)]
NonNegative = Annotated[float, Field(strict=True, ge=0, allow_inf_nan=False)]
Fraction = Annotated[float, Field(strict=True, ge=0, le=1)]
Flag = Annotated[bool, Field(strict=True)]
Count = Annotated[int, Field(strict=True, ge=1, le=1_000_000)]

if TYPE_CHECKING:

    @dataclass_transform(frozen_default=True, kw_only_default=True)
    def options(cls: type) -> type:
        """Class decorator: a frozen, keyword-only dataclass, validated."""
        ...

else:

    def options(cls: type) -> type:
        """Class decorator: a frozen, keyword-only dataclass, validated, unknown fields refused."""
        make: Callable[[type], type] = pydantic.dataclasses.dataclass(
            frozen=True, kw_only=True, config=ConfigDict(extra="forbid", strict=False)
        )
        return make(cls)
