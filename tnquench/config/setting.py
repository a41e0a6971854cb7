"""One setting: its bounds, default, unit and meaning, said once for loader, defaults and reference page."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, ClassVar, cast

from pydantic import BaseModel, ConfigDict, Field
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined


class Section(BaseModel):
    """A table of settings: frozen, without unknown keys, without numbers that are not finite."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)

    #: Lines of TOML that the reference page shows for this table.
    EXAMPLE: ClassVar[str] = ""


def setting(
    meaning: str,
    *,
    default: Any = PydanticUndefined,
    unit: str = "",
    symbols: tuple[str, ...] = (),
    remark: str = "",
    default_rule: str = "",
    **bounds: Any,
) -> Any:
    """Declare one setting of a `Section`.

    meaning      : one sentence for the reference page
    default      : value where the config is silent; without one the setting must be given
    unit         : what its numbers are multiples of, for example "1/J"; empty for pure numbers and text
    symbols      : what a physicist may write instead; used only to hint at the right name
    remark       : reason of the bounds, added to a message about them
    default_rule : how a default that depends on other settings is found
    bounds       : gt, ge, lt, le, max_length, pattern as pydantic knows them
    """
    notes = {"unit": unit, "symbols": symbols, "remark": remark, "default_rule": default_rule}
    extra = cast("dict[str, Any]", notes)
    return Field(default, description=meaning, json_schema_extra=extra, **bounds)


def note(field: FieldInfo, name: str) -> Any:
    """Return what `setting` noted about a field under `name` (unit, symbols, remark, default_rule)."""
    extra = field.json_schema_extra
    return extra.get(name, "") if isinstance(extra, Mapping) else ""
