"""Compress image stacks under a maximum error that holds for every pixel, and prove it.

>>> import stackbound
>>> report = stackbound.compress("embryo.ome.tif", "embryo.ome.zarr", tolerance=4)  # doctest: +SKIP
>>> stack = stackbound.open("embryo.ome.zarr")  # doctest: +SKIP
>>> stackbound.verify("embryo.ome.zarr", against="embryo.ome.tif").ok  # doctest: +SKIP
True
>>> stackbound.restore("embryo.ome.zarr", "again.ome.tif")  # doctest: +SKIP
"""

from __future__ import annotations

import importlib
import sys
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from stackbound.config import PipelineConfig as PipelineConfig
    from stackbound.config import read_config as read_config
    from stackbound.demo import demo as demo
    from stackbound.inspect import inspect as inspect
    from stackbound.opened import StoredStack as StoredStack
    from stackbound.opened import open_store as open  # noqa: A004  # read as stackbound.open
    from stackbound.plugins import hookimpl as hookimpl
    from stackbound.plugins import use_plugin as use_plugin
    from stackbound.reports import CompressReport as CompressReport
    from stackbound.reports import Progress as Progress
    from stackbound.reports import RestoreReport as RestoreReport
    from stackbound.reports import VerifyReport as VerifyReport
    from stackbound.restore import restore as restore
    from stackbound.run import compress as compress
    from stackbound.verify import verify as verify

__version__ = "0.1.0"

# Importing the package costs nothing: each name is loaded when it is first used (PEP 562).
_HOMES = {
    "CompressReport": ("reports", "CompressReport"),
    "PipelineConfig": ("config", "PipelineConfig"),
    "Progress": ("reports", "Progress"),
    "RestoreReport": ("reports", "RestoreReport"),
    "StoredStack": ("opened", "StoredStack"),
    "VerifyReport": ("reports", "VerifyReport"),
    "compress": ("run", "compress"),
    "demo": ("demo", "demo"),
    "hookimpl": ("plugins", "hookimpl"),
    "inspect": ("inspect", "inspect"),
    "open": ("opened", "open_store"),
    "read_config": ("config", "read_config"),
    "restore": ("restore", "restore"),
    "use_plugin": ("plugins", "use_plugin"),
    "verify": ("verify", "verify"),
}

__all__ = [
    "CompressReport",
    "PipelineConfig",
    "Progress",
    "RestoreReport",
    "StoredStack",
    "VerifyReport",
    "__version__",
    "compress",
    "demo",
    "hookimpl",
    "inspect",
    "open",
    "read_config",
    "restore",
    "use_plugin",
    "verify",
]


def __getattr__(name: str) -> Any:
    try:
        module, attribute = _HOMES[name]
    except KeyError:
        raise AttributeError(f"module 'stackbound' has no attribute {name!r}") from None
    value = getattr(importlib.import_module(f"stackbound.{module}"), attribute)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return __all__


class _Package(ModuleType):
    def __setattr__(self, name: str, value: object) -> None:
        # The import system binds every submodule to its name here; where a function has that name, the function stays.
        if not (name in _HOMES and isinstance(value, ModuleType)):
            super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Package
