"""Kinds of values that settings take, and how faults in them are said."""

import difflib
import json
import re
from pathlib import Path
from typing import Annotated, Any, Final, Literal, get_args

from pydantic import AfterValidator, BaseModel, BeforeValidator, Field
from pydantic.fields import FieldInfo

from shelfmap.constants import CONSTITUENTS

__all__ = [
    "ColumnName",
    "ConstituentName",
    "DeepSea",
    "FilePath",
    "FilePaths",
    "WaveColumns",
    "check_box",
    "fault_text",
    "section_of",
    "setting_rows",
    "shown",
]

#: Longest name of a file, and longest path, that systems take, less room for the folder of the settings.
_NAME_BYTES: Final = 255
_PATH_BYTES: Final = 3000
#: Depths a deep sea may have, metres.
DEEP_M: Final = (500.0, 11_000.0)


#: Text of a fault shows no more of a value than this many characters.
_SHOWN: Final = 60


def shown(value: object) -> str:
    """Value as TOML writes it, on one line, cut where it is long."""
    if value is None or isinstance(value, int | float | list | tuple | str | dict):
        try:
            text = json.dumps(value, ensure_ascii=False, default=str)
        except ValueError:  # whole numbers too long to be written out
            text = "a number of thousands of digits"
    else:
        text = str(value)
    text = "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)
    return text if len(text) <= _SHOWN else f"{text[:_SHOWN]}..."


def _key(part: object) -> str:
    """Name of a setting, or the place in a list, quoted where it is no bare key of TOML."""
    return str(part) if re.fullmatch(r"[\w-]{1,60}", str(part)) else shown(str(part))


def _constituent_name(value: object) -> object:
    """Give the usual spelling of a constituent, or the nearest name there is."""
    if not isinstance(value, str):
        return value
    usual = {name.lower(): name for name in CONSTITUENTS}
    if value.lower() not in usual:
        near = difflib.get_close_matches(value.lower(), usual, n=1, cutoff=0.0)
        raise ValueError(
            f"constituent {shown(value)} is unknown; did you mean {usual[near[0]]!r}? Known: {', '.join(CONSTITUENTS)}"
        )
    return usual[value.lower()]


def _deep(value: object) -> object:
    """Refuse what is no depth in one sentence, not one for each kind of value allowed."""
    if value != "deepest" and not (isinstance(value, int | float) and DEEP_M[0] <= value <= DEEP_M[1]):
        raise ValueError(
            f'{shown(value)} is no depth of a deep sea: give {DEEP_M[0]:g} to {DEEP_M[1]:g} m, or "deepest"'
        )
    return value


def _as_path(value: object) -> object:
    if value == "":
        raise ValueError("path is empty")
    if isinstance(value, str) and "\0" in value:
        raise ValueError("path holds a null character; leave it out")
    if isinstance(value, str) and any(c in value for c in "\n\r\t"):
        raise ValueError(f"path {shown(value)} holds a line break or a tab, which GDAL takes away; rename the file")
    if isinstance(value, str) and (
        len(value.encode("utf-8", "surrogatepass")) > _PATH_BYTES
        or any(len(part.encode("utf-8", "surrogatepass")) > _NAME_BYTES for part in Path(value).parts)
    ):
        raise ValueError(
            f"path {shown(value)} has a name of more than {_NAME_BYTES} bytes, or more than {_PATH_BYTES} "
            "in all, which no disk takes; shorten it"
        )
    return value


def _as_paths(value: object) -> object:
    """Refuse what is no name of a file and no list of such names in one sentence."""
    if isinstance(value, str | Path):
        return _as_path(value)
    if not isinstance(value, list | tuple) or not all(isinstance(name, str | Path) for name in value):
        raise ValueError(f"path = {value!r}: must be the name of a file, in quotes, or a list of such names")
    if not value:
        raise ValueError("path = []: the list is empty; name at least one file")
    names = [str(Path(name)) for name in value if _as_path(name)]
    twice = next((name for name in names if names.count(name) > 1), None)
    if twice is not None:
        raise ValueError(f"path names {twice!r} twice; name each file once, the one to be used first in front")
    return tuple(value)


def check_box(box: tuple[float, float, float, float]) -> None:
    """Refuse a box whose edges are not in order or not on the globe; as a ValueError, which pydantic collects."""
    west, south, east, north = box
    if not -90 <= south < north <= 90:
        raise ValueError(f"box = {list(box)}: south must be below north, both within -90 and 90")
    if not (-360 <= west <= 360 and -360 <= east <= 360) or west == east:
        raise ValueError(f"box = {list(box)}: west and east must differ and lie within -360 and 360")


def _with_name(value: str) -> str:
    """Refuse names of columns that do not hold the place of the constituent once."""
    if value.count("{name}") != 1:
        raise ValueError(f'{shown(value)}: must hold {{name}} once, which stands for the constituent: "{{name}}_amp"')
    return value


ConstituentName = Annotated[str, BeforeValidator(_constituent_name)]
FilePath = Annotated[Path, BeforeValidator(_as_path)]
FilePaths = Annotated[Path | tuple[Path, ...], BeforeValidator(_as_paths)]
ColumnName = Annotated[str, Field(min_length=1)]
WaveColumns = Annotated[str, AfterValidator(_with_name)]
DeepSea = Annotated[Annotated[float, Field(ge=DEEP_M[0], le=DEEP_M[1])] | Literal["deepest"], BeforeValidator(_deep)]


def setting_rows(model: type[BaseModel], stem: str) -> list[str]:
    """Rows of README's table of settings: those of a section and of the sections in it."""
    rows = []
    for name, field in model.model_fields.items():
        inner = section_of(field)
        if inner is not None:
            rows += setting_rows(inner, f"{stem}{name}.")
            continue
        default = field.get_default(call_default_factory=True)
        shown = "none" if default is None else f"`{json.dumps(default, default=str)}`"
        rows.append(f"| `{stem}{name}` | {'must be given' if field.is_required() else shown} | {field.description} |")
    return rows


def section_of(field: FieldInfo) -> type[BaseModel] | None:
    """Class of a setting that is a section, one that may be left out too; None for a value."""
    kinds = [kind for kind in (field.annotation, *get_args(field.annotation)) if isinstance(kind, type)]
    return next((kind for kind in kinds if issubclass(kind, BaseModel)), None)


def fault_text(model: type[BaseModel], fault: dict[str, Any]) -> str:
    """Say one fault as a person would: where, what is wrong with its value, what is allowed."""
    where = ".".join(_key(part) for part in fault["loc"] if part != "[key]")
    if fault["type"] == "extra_forbidden":
        known = sorted(_known_names(model, fault["loc"][:-1]))
        near = difflib.get_close_matches(str(fault["loc"][-1]), known, n=1, cutoff=0.5)
        hint = f"did you mean {near[0]!r}?" if near else f"known here: {', '.join(known)}"
        return f"{where}: no such setting; {hint}"
    if fault["type"] == "missing":
        return f"{where}: must be given"
    if fault["type"] == "path_type":
        return f"{where} = {shown(fault['input'])}: must be the name of a file, in quotes"
    message = str(fault["msg"]).removeprefix("Value error, ")
    value = "" if fault["type"] == "value_error" else f" = {shown(fault['input'])}"
    return f"{where}{value}: ".removeprefix(": ") + message[:1].lower() + message[1:]


def _known_names(model: type[BaseModel], loc: tuple[int | str, ...]) -> set[str]:
    """Names of the settings at one place of the tree."""
    for part in loc:
        field = model.model_fields.get(str(part))
        inner = None if field is None else section_of(field)
        if inner is None:
            return set()
        model = inner
    return set(model.model_fields)
