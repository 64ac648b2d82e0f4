"""The configuration of a run: a TOML file, a shipped recipe or a mapping, checked before anything else happens.

What is read is validated in pydantic's strict mode through JSON, so that ``true`` is not 1 and ``"3"`` is not 3, by a
model that is put together from the stages of the registry: options of plugins are checked as strictly as our own.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from . import _configmodel as model
from .errors import ConfigError, UsageError
from .guard import make
from .plugins import Origin, Registry, registry
from .recipes import read_document
from .stages import Options
from .tolerance import UNITS, Tolerance, exact_decimal

if TYPE_CHECKING:
    from .stages import Encode, Predict, Tile, Verify

__all__ = ["Choice", "Pipeline", "PipelineConfig", "Tolerance", "build", "read_config", "schema"]

STAGES = ("tile", "predict", "transform", "quantize", "encode")
"""The kinds of stage of which a run has exactly one each, in the order the data flows; also the TOML tables."""


@dataclass(frozen=True)
class Choice:
    """One stage that a configuration names, with its options."""

    name: str
    options: Options

    def record(self) -> dict[str, Any]:
        """Return name and options as JSON of whole numbers and strings."""
        return {"name": self.name, **_without_floats(self.options.model_dump(mode="json"))}


@dataclass(frozen=True)
class PipelineConfig:
    """All that decides the bytes of a store besides its source and the version of stackbound.

    Made by `read_config`; every stage and every option is present, defaults included.

    Attributes
    ----------
    tolerance : Tolerance
        The largest change allowed to any pixel.
    tile, predict, transform, quantize, encode : Choice
        The stage of each kind, with its options.
    figures : tuple of Choice
        The verify stages whose figures go into the log, in this order.
    """

    tolerance: Tolerance
    tile: Choice
    predict: Choice
    transform: Choice
    quantize: Choice
    encode: Choice
    figures: tuple[Choice, ...] = field(default=())

    def record(self) -> dict[str, Any]:
        """Return the configuration as JSON of whole numbers and strings (floats as decimal strings).

        `from_record` makes an equal configuration of it; store, log and resumed runs compare this form.
        """
        stages = {kind: getattr(self, kind).record() for kind in STAGES}
        figures = [figure.record() for figure in self.figures]
        return {"tolerance": self.tolerance.record(), **stages, "verify": {"figures": figures}}

    @classmethod
    def from_record(cls, record: Mapping[str, Any], source: Registry | None = None) -> PipelineConfig:
        """Return the configuration that `record` came from.

        Raises
        ------
        stackbound.errors.ConfigError
            The record is not one of a configuration, or names a stage or option that is not there.
        """
        source = registry() if source is None else source
        # Floats come back from their decimal strings, which only the lax mode allows; the record was strict once.
        return _validated(dict(record), source, strict=False, where="record of a configuration")


def read_config(
    config: str | Path | Mapping[str, Any] | PipelineConfig | None = None,
    *,
    tolerance: object = None,
    unit: str | None = None,
) -> PipelineConfig:
    """Return a complete, checked configuration.

    Parameters
    ----------
    config : path, str, mapping or PipelineConfig, optional
        A TOML file, the name of a shipped recipe, or the same as a mapping. Defaults without.
    tolerance : int, float, str or decimal.Decimal, optional
        The largest change allowed to any pixel; wins over the configuration's. Kept exactly as written: "0.1" and 0.1
        both mean one tenth.
    unit : str, optional
        Unit of `tolerance`; without it the configuration's unit, else "stored".

    Raises
    ------
    stackbound.errors.ConfigError
        A file or recipe is missing or wrong; names file and TOML path.
    stackbound.errors.UsageError
        The tolerance is missing, negative, not finite or not a number.
    """
    if unit is not None and tolerance is None:
        raise UsageError("A unit was given without a tolerance.", where="--unit", remedy="Give both.")
    if isinstance(config, PipelineConfig):
        document: dict[str, Any] = config.record()
        where, strict = "configuration", False
    else:
        document, where = read_document(config)
        strict = True
    _override_tolerance(document, tolerance, unit, where)
    return _validated(document, registry(), strict=strict, where=where)


def _override_tolerance(document: dict[str, Any], tolerance: object, unit: str | None, where: str) -> None:
    """Put the caller's tolerance and unit into `document`; refuse a document that has no tolerance then."""
    table = document.get("tolerance", {})
    if not isinstance(table, dict):
        raise ConfigError("must be a table with the key 'value'.", where=f"{where}: tolerance")
    table = dict(table)
    if unit is not None:
        if unit not in UNITS:
            raise UsageError(model.unknown_unit(unit), where="--unit")
        table["unit"] = unit
    if tolerance is not None:
        try:
            table["value"] = str(exact_decimal(tolerance))
        except ValueError as error:
            raise UsageError(f"{error}.", where="--tolerance", remedy=TOLERANCE_HINT) from None
    elif "value" not in table:
        raise UsageError("No tolerance was given.", where="--tolerance", remedy=TOLERANCE_HINT)
    document["tolerance"] = table


TOLERANCE_HINT = (
    "Give the largest change that any pixel may suffer, in stored pixel values: --tolerance 4, say; "
    "--tolerance 0 stores without loss."
)


def _validated(document: dict[str, Any], source: Registry, *, strict: bool, where: str) -> PipelineConfig:
    text = json.dumps(document, default=str)
    try:
        checked: Any = model.document_model(source).model_validate_json(text, strict=strict)
    except ValidationError as error:
        raise ConfigError(model.explain(error, source), where=where) from None
    return PipelineConfig(
        tolerance=checked.tolerance,
        **{kind: _choice(getattr(checked, kind), kind, source) for kind in STAGES},
        figures=tuple(_choice(figure, "verify", source) for figure in checked.verify.figures),
    )


def _choice(entry: Any, kind: str, source: Registry) -> Choice:
    """Return the stage that a validated entry names; its options are an instance of the stage's own class."""
    options = source.get(kind, entry.name).Options
    return Choice(entry.name, options.model_construct(**{key: getattr(entry, key) for key in options.model_fields}))


def _without_floats(value: Any) -> Any:
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, Mapping):
        return {str(key): _without_floats(item) for key, item in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, str):
        return [_without_floats(item) for item in value]
    return value


def schema(source: Registry | None = None) -> dict[str, Any]:
    """Return the JSON Schema of a configuration file, the options of plugins included."""
    return model.document_schema(registry() if source is None else source)


@dataclass(frozen=True)
class Pipeline:
    """The stages of a run, made once and used from several threads.

    Attributes
    ----------
    config : PipelineConfig
        What they were made from.
    tile, predict, encode : stages
        The objects; `predict` holds the transform and quantize stages that it composes.
    figures : tuple of stackbound.stages.Verify
        In the order of the configuration.
    origins : mapping of str to Origin
        Where each stage comes from, by "kind:name".
    """

    config: PipelineConfig
    tile: Tile
    predict: Predict
    encode: Encode
    figures: tuple[Verify, ...]
    origins: Mapping[str, Origin]


def build(config: PipelineConfig, source: Registry | None = None) -> Pipeline:
    """Return the stages of a configuration; those of plugins behind a guard (`stackbound.guard`).

    Raises
    ------
    stackbound.errors.PluginError
        A stage raised while it was made; names it and where it comes from.
    """
    source = registry() if source is None else source
    tile = make(source, "tile", config.tile.name, config.tile.options)
    parts = {
        kind: make(source, kind, choice.name, choice.options)
        for kind, choice in (("transform", config.transform), ("quantize", config.quantize))
    }
    predict = make(source, "predict", config.predict.name, config.predict.options, **parts)
    encode = make(source, "encode", config.encode.name, config.encode.options)
    figures = tuple(make(source, "verify", figure.name, figure.options) for figure in config.figures)
    used = [*((kind, getattr(config, kind).name) for kind in STAGES), *predict.others]
    used += [("verify", figure.name) for figure in config.figures]
    origins = {f"{kind}:{name}": source.origin(source.get(kind, name)) for kind, name in used}
    return Pipeline(config, tile, predict, encode, figures, origins)
