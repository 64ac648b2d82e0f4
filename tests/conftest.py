"""Fixtures shared by all tests."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from stackbound import plugins


@pytest.fixture
def fresh_registry(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """Let one test load plugins into a registry of its own; the process-wide one comes back afterwards."""
    monkeypatch.setattr(plugins, "_registry", None)
    for name in (plugins.SWITCH, plugins.FILES):
        monkeypatch.delenv(name, raising=False)
    yield
