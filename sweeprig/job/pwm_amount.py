"""The PWM frequency as it stands in a sweep: a quantity, or the word for what an analogue timer gives by itself.

One value as written into one value in base units. Which of the two fits a rig is pwm_checks.py.
"""

from __future__ import annotations

from dataclasses import dataclass

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic_core import core_schema

from sweeprig.job.amounts import Amount, exact_text, unit_pattern

TIMER = "timer"
BY_TIMER = 0.0
"""How the word is held: a frequency that no PWM has."""


@dataclass(frozen=True, slots=True)
class PwmAmount(Amount):
    """A frequency with its unit, or `"timer"`, held as BY_TIMER."""

    def read(self, value: object) -> float:
        return BY_TIMER if value == TIMER else Amount.read(self, value)

    def _write_out(self, value: float) -> str:
        return TIMER if value == BY_TIMER else exact_text(value, self.unit)

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> core_schema.CoreSchema:
        writer = core_schema.plain_serializer_function_ser_schema(self._write_out)
        return core_schema.no_info_plain_validator_function(self.read, serialization=writer)

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, object]:
        made = Amount.__get_pydantic_json_schema__(self, schema, handler)
        about = f"{made['description']}. Or {TIMER}, where the rig's analogue timer makes its own"
        return made | {"pattern": f"^{TIMER}$|{unit_pattern(self.unit)}", "description": about}
