"""What every table of a study file has in common."""

from pydantic import BaseModel, ConfigDict


class Table(BaseModel):
    """A table of the study file: unknown keys refused, types not bent, values fixed once read."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)
