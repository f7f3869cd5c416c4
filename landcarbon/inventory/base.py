"""What every section of the project file has in common."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict

__all__ = ["Section"]


class Section(BaseModel):
    """A table of the project file: fixed keys, unchanged after loading, no guessing of types."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False, protected_namespaces=())
