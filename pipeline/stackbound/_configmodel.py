"""The pydantic model of a configuration file, put together from the registry; its schema; its errors in plain words."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, create_model

from .errors import PluginError
from .plugins import Registry
from .stages import Stage
from .tolerance import UNITS, Tolerance

DEFAULTS = {
    "tile": "grid",
    "predict": "best",
    "transform": "dct",
    "quantize": "uniform",
    "encode": "rans",
}
"""The stage of each kind that a run uses when the configuration names none; also the TOML tables, in data order."""

DEFAULT_FIGURES = ("max-error", "mean-error", "rmse", "psnr")

_STRICT = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


def document_model(source: Registry) -> type[BaseModel]:
    """Return the model of a whole configuration file, one discriminated union of stages for each table."""
    tables: dict[str, Any] = {}
    for kind, default in DEFAULTS.items():
        entry: Any = Annotated[_entries(kind, source, default), BeforeValidator(_with_name(default))]
        tables[kind] = (entry, Field(default={"name": default}, validate_default=True))
    figure: Any = Annotated[_entries("verify", source, None), BeforeValidator(_named)]
    figures: Any = Annotated[list[figure], AfterValidator(_all_different)]
    verify = create_model(
        "Verify",
        __config__=_STRICT,
        figures=(figures, Field(default=list(DEFAULT_FIGURES), validate_default=True)),
    )
    return create_model(
        "Configuration",
        __config__=_STRICT,
        tolerance=(Tolerance, ...),
        **tables,
        verify=(verify, Field(default={}, validate_default=True)),
    )


def _entries(kind: str, source: Registry, default: str | None) -> Any:
    """Return the union of all stages of a kind; each entry is the stage's own options and its name."""
    entries = [_entry(cls, required=cls.name != default) for cls in source.classes(kind)]
    if not entries:
        reasons = "; ".join(map(str, source.failures[:3]))
        raise PluginError(f"No {kind} stage could be loaded: {reasons}.", remedy="Install stackbound again.")
    union: Any = entries[0]
    for entry in entries[1:]:
        union |= entry
    return Annotated[union, Field(discriminator="name")]


def _entry(cls: type[Stage], *, required: bool) -> type[BaseModel]:
    # Only the default stage may be meant without its name, so a file matches exactly one entry of the schema.
    name: Any = (Literal[cls.name], ... if required else cls.name)
    summary = (cls.__doc__ or "").strip().partition("\n")[0] or None
    return create_model(f"{cls.kind}:{cls.name}", __base__=cls.Options, __doc__=summary, name=name)


def _with_name(default: str) -> Any:
    def add(value: Any) -> Any:
        return {"name": default, **value} if isinstance(value, dict) and "name" not in value else value

    return add


def _named(value: Any) -> Any:
    return {"name": value} if isinstance(value, str) else value


def _all_different(figures: list[Any]) -> list[Any]:
    names = [figure.name for figure in figures]
    for name in names:
        if names.count(name) > 1:
            raise ValueError(f"'{name}' is there more than once")
    return figures


# ------------------------------------------------------------------------------------------------------------ schema


def document_schema(source: Registry) -> dict[str, Any]:
    """Return the JSON Schema of a configuration file."""
    result = document_model(source).model_json_schema()
    figures = result["$defs"]["Verify"]["properties"]["figures"]
    # Figures without options are written as their bare names.
    figures["items"] = {"anyOf": [{"enum": source.names("verify")}, figures["items"]]}
    # A run may take the tolerance from the command line, so a file need not hold one.
    result["required"] = [name for name in result.get("required", []) if name != "tolerance"]
    result["$defs"]["Tolerance"].pop("required", None)
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", "title": "stackbound configuration"} | {
        key: value for key, value in result.items() if key != "title"
    }


# ------------------------------------------------------------------------------------------------------------ errors


def explain(error: ValidationError, source: Registry) -> str:
    """Return one line for each thing that is wrong, each with its TOML path."""
    return "\n".join(_explain_one(item, source) for item in error.errors(include_url=False))


def _explain_one(item: Any, source: Registry) -> str:
    kind, loc = _without_tags(item["loc"])
    path = _toml_path(loc)
    what, given = item["type"], item["input"]
    if what == "extra_forbidden":
        stage = f"of '{item['loc'][-2]}'" if kind is not None else "here"
        return f"{path}: unknown key{_suggest(str(loc[-1]), _keys(item['loc'], source), stage)}"
    if what == "union_tag_invalid":
        name = given.get("name")
        return f"{path}: {source.unknown(kind or '', name) if isinstance(name, str) else 'name must be text.'}"
    if what == "missing":
        return f"{path}: is missing."
    if loc == ("tolerance", "unit"):
        return f"{path}: {unknown_unit(given)}"
    if what in ("model_type", "model_attributes_type", "dict_type", "union_tag_not_found"):
        return f"{path}: must be a table, not {given!r}."
    text = item["msg"].removeprefix("Value error, ").rstrip(".")
    return f"{path}: {text}." if what == "value_error" else f"{path}: {text}, not {given!r}."


def _without_tags(loc: tuple[int | str, ...]) -> tuple[str | None, tuple[int | str, ...]]:
    """Return the kind of stage that a location lies in, and the location without the name that pydantic puts in."""
    if loc and loc[0] in DEFAULTS:
        return str(loc[0]), (loc[0], *loc[2:])
    if loc[:2] == ("verify", "figures"):
        return "verify", (*loc[:3], *loc[4:])
    return None, loc


def _keys(loc: tuple[int | str, ...], source: Registry) -> Iterable[str]:
    kind, rest = _without_tags(loc)
    if kind is not None:
        depth = 1 if kind in DEFAULTS else 3
        if len(rest) == depth + 1:
            return ["name", *source.get(kind, str(loc[depth])).Options.model_fields]
        return []
    return {1: ["tolerance", *DEFAULTS, "verify"], 2: ["value", "unit"] if loc[0] == "tolerance" else ["figures"]}[
        len(loc)
    ]


def _suggest(word: str, known: Iterable[str], where: str) -> str:
    known = list(known)
    near = difflib.get_close_matches(word, known, n=1)
    if near:
        return f"; did you mean '{near[0]}'?"
    return f"; the keys {where} are: {', '.join(known)}." if known else "."


def _toml_path(loc: tuple[int | str, ...]) -> str:
    path = ""
    for part in loc:
        path += f"[{part}]" if isinstance(part, int) else f".{part}" if path else str(part)
    return path


def unknown_unit(unit: object) -> str:
    """Return the sentence that says that there is no such unit."""
    return f"There is no unit '{unit}'; the units are: {', '.join(UNITS)}."
