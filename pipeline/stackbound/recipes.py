"""Configuration files and the recipes that ship with stackbound."""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping
from decimal import Decimal
from pathlib import Path
from typing import Any

from .errors import ConfigError
from .tolerance import exact_decimal

__all__ = ["read_document", "recipe_names", "recipe_path"]


def _folder() -> Path:
    """Return the folder of the recipes: in the package when installed from a wheel, else in the checkout."""
    here = Path(__file__).parent
    inside = here / "recipes"
    return inside if inside.is_dir() else here.parents[1] / "configs"


def recipe_names() -> list[str]:
    """Return the names of the shipped recipes, sorted."""
    return sorted(path.stem for path in _folder().glob("*.toml"))


def recipe_path(name: str) -> Path:
    """Return the file of a shipped recipe.

    Raises
    ------
    stackbound.errors.ConfigError
        There is no such recipe; the message suggests the nearest name.
    """
    names = recipe_names()
    if name not in names:
        near = difflib.get_close_matches(name, names, n=1)
        hint = f"did you mean '{near[0]}'?" if near else f"the recipes are: {', '.join(names)}."
        raise ConfigError(f"There is no recipe and no file '{name}'; {hint}", where="--config")
    return _folder() / f"{name}.toml"


def read_document(config: str | Path | Mapping[str, Any] | None) -> tuple[dict[str, Any], str]:
    """Return the content of a configuration as JSON values, and its name for messages.

    Parameters
    ----------
    config : path, str, mapping or None
        A TOML file, the name of a recipe, a mapping of the same shape, or nothing.

    Returns
    -------
    dict
        A fresh dictionary; the tolerance's value, where there is one, as an exact decimal string.
    str
        File, recipe or "config".

    Raises
    ------
    stackbound.errors.ConfigError
        Missing, unreadable or not TOML.
    """
    if config is None:
        return {}, "config"
    if isinstance(config, Mapping):
        return _jsonable(dict(config), "config"), "config"
    if not isinstance(config, str | Path):
        raise ConfigError(f"A configuration is a file, a recipe's name or a mapping, not {type(config).__name__}.")
    path = _path(config)
    where = str(path)
    try:
        text = path.read_bytes().decode("utf-8-sig")
        document = tomllib.loads(text, parse_float=Decimal)
    except FileNotFoundError:
        raise ConfigError("The configuration file does not exist.", where=where) from None
    except OSError as error:
        raise ConfigError(f"The configuration file cannot be read ({error.strerror}).", where=where) from error
    except UnicodeDecodeError as error:
        raise ConfigError(f"The configuration file is not UTF-8 text (byte {error.start}).", where=where) from error
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(f"The configuration file is not TOML: {error}.", where=where) from error
    table = document.get("tolerance")
    if isinstance(table, dict) and isinstance(table.get("value"), str):
        text = table["value"]
        raise ConfigError(f'must be a number, not the text "{text}".', where=f"{where}: tolerance.value")
    return _jsonable(document, where), where


def _path(config: str | Path) -> Path:
    path = Path(config)
    is_name = isinstance(config, str) and path.name == config and not path.suffix
    # A recipe's name means the recipe, whatever files lie in the working folder; a file is named by "./" or a suffix.
    if is_name and (config in recipe_names() or not path.exists()):
        return recipe_path(str(config))
    return path


def _jsonable(document: dict[str, Any], where: str) -> dict[str, Any]:
    result: dict[str, Any] = _plain(document)
    table = document.get("tolerance")
    if isinstance(table, Mapping) and "value" in table:
        try:
            result["tolerance"]["value"] = str(exact_decimal(table["value"]))
        except ValueError as error:
            raise ConfigError(f"{error}.", where=f"{where}: tolerance.value") from None
    return result


def _plain(value: Any) -> Any:
    """Return `value` as what JSON can hold: decimals and NumPy scalars as numbers, everything unknown as text."""
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, Decimal):
        return float(value)
    if isinstance(value, str | bool | int | float) or value is None:
        return value
    tolist = getattr(value, "tolist", None)
    return tolist() if callable(tolist) else str(value)
