"""What all models of the contract's files share."""

from __future__ import annotations

from typing import Annotated

import pydantic as pd

Name = Annotated[str, pd.StringConstraints(pattern=r"^[a-z][a-z0-9]*([_-][a-z0-9]+)*$")]
Text = Annotated[str, pd.StringConstraints(min_length=1, strip_whitespace=True)]
U8 = Annotated[int, pd.Field(ge=0, le=0xFF)]
U16 = Annotated[int, pd.Field(ge=0, le=0xFFFF)]
U32 = Annotated[int, pd.Field(ge=0, le=0xFFFF_FFFF)]
Natural = Annotated[int, pd.Field(ge=0)]
Positive = Annotated[int, pd.Field(ge=1)]


class Model(pd.BaseModel):
    """One table of a file: nothing beyond the stated keys, no conversion between types, never changed."""

    model_config = pd.ConfigDict(extra="forbid", frozen=True, strict=True)
