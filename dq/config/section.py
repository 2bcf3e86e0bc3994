"""What all sections of the configuration share."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict

#: Pattern of a channel's name.
CHANNEL = r"^[A-Za-z0-9][A-Za-z0-9:_.\-]{0,254}$"


class Section(BaseModel):
    """A frozen table of keys; unknown ones and infinities are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)
