"""The base of every document's model: strict, immutable, with times that know their offset."""

from __future__ import annotations

from datetime import UTC
from typing import Annotated

from pydantic import AfterValidator, AwareDatetime, BaseModel, ConfigDict


class Model(BaseModel):
    """A strict, immutable model: unknown keys and infinite numbers are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, str_strip_whitespace=True)


Utc = Annotated[AwareDatetime, AfterValidator(lambda moment: moment.astimezone(UTC))]
