"""What authors of stages run to see whether a class keeps the contract of its kind.

In a test of one line::

    def test_my_quantizer():
        assert_conforms(MyQuantizer)

or from the command line: ``stackbound check-plugin FILE|NAME``. Each finding says what is wrong and how to mend it.
The checks call the class as the machine does, on data that finds the usual mistakes; they cannot prove that a stage is
good, only that it behaves.
"""

from __future__ import annotations

import contextlib
import io
import json
import pickle
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from . import _conformance
from .registry import contract_problem
from .stages import Options, Stage

__all__ = ["Finding", "Findings", "assert_conforms", "check_stage"]


@dataclass(frozen=True)
class Finding:
    """One thing that a stage class does wrong.

    Attributes
    ----------
    what : str
        What is wrong.
    remedy : str
        How to mend it.
    """

    what: str
    remedy: str

    def __str__(self) -> str:
        return f"{self.what} {self.remedy}"


@dataclass(frozen=True)
class Findings:
    """The outcome for one stage class.

    Attributes
    ----------
    stage : str
        Kind and name.
    checks : tuple of str
        What was checked.
    findings : tuple of Finding
        What is wrong; empty for a class that keeps its contract.
    notes : tuple of str
        What is worth knowing: speed relative to the built-in stage, size of the result.
    """

    stage: str
    checks: tuple[str, ...] = ()
    findings: tuple[Finding, ...] = ()
    notes: tuple[str, ...] = field(default=(), compare=False)

    @property
    def ok(self) -> bool:
        """Whether nothing was found."""
        return not self.findings

    def to_json(self) -> dict[str, Any]:
        """Return the outcome as plain JSON values."""
        findings = [{"what": finding.what, "remedy": finding.remedy} for finding in self.findings]
        return {"stage": self.stage, "checks": list(self.checks), "findings": findings, "notes": list(self.notes)}


def assert_conforms(cls: type[Stage], *, example: str | Path | None = None, options: Options | None = None) -> None:
    """Fail, as a test does, when a stage class breaks the contract of its kind.

    Parameters
    ----------
    cls : type
        The stage class.
    example : path, optional
        For a load stage: a file that it can read; without one its reading is not checked.
    options : Options, optional
        The options to make it with; its defaults without.

    Raises
    ------
    AssertionError
        Names everything that was found.
    """
    result = check_stage(cls, example=example, options=options)
    if not result.ok:
        lines = [f"- {finding}" for finding in result.findings]
        raise AssertionError("\n".join([f"{result.stage} breaks its contract:", *lines]))


def check_stage(cls: type[Stage], *, example: str | Path | None = None, options: Options | None = None) -> Findings:
    """Return what a stage class does wrong.

    Parameters
    ----------
    cls, example, options
        As for `assert_conforms`.
    """
    problem = contract_problem(cls)
    if problem is not None:
        return Findings(getattr(cls, "__name__", repr(cls)), findings=(Finding(f"{problem}.", "See stages.py."),))
    title = f"{cls.kind} {cls.name}"
    checks: list[str] = []
    findings: list[Finding] = []
    notes: list[str] = []
    steps: list[tuple[str, Callable[[], Iterator[tuple[str, str]]]]] = [
        ("documentation", lambda: _documentation(cls)),
        ("options", lambda: _options(cls)),
        ("pickling", lambda: _pickling(cls, options)),
    ]
    context = _conformance.Context(cls, options, None if example is None else Path(example), notes)
    steps += _conformance.checks(context)
    for name, step in steps:
        checks.append(name)
        printed = io.StringIO()
        try:
            with contextlib.redirect_stdout(printed):
                findings += [Finding(what, remedy) for what, remedy in step()]
        except (Exception, SystemExit) as error:  # noqa: BLE001  # the finding names whatever was raised
            reason = " ".join(f"{type(error).__name__}: {error}".split())
            findings.append(Finding(f"It raised {reason} ({name}).", "A stage must cope with every allowed input."))
        if printed.getvalue():
            findings.append(Finding(f"It prints to standard output ({name}).", "Results go there; use logging."))
    return Findings(title, tuple(checks), tuple(dict.fromkeys(findings)), tuple(dict.fromkeys(notes)))


# ------------------------------------------------------------------------------------------------ checks of every kind


def _documentation(cls: type[Stage]) -> Iterator[tuple[str, str]]:
    if not (cls.__doc__ or "").strip() or cls.__doc__ == cls.__mro__[1].__doc__:
        yield "The class has no docstring.", "Say in one line what it does: 'stackbound plugins' shows it."
    for name, option in cls.Options.model_fields.items():
        if not option.description:
            yield f"The option '{name}' has no description.", "Write a docstring below it: the schema shows it."


def _options(cls: type[Stage]) -> Iterator[tuple[str, str]]:
    try:
        json.dumps(cls.Options.model_json_schema())
    except Exception as error:  # noqa: BLE001  # pydantic raises many kinds
        yield f"Its options have no JSON Schema ({error}).", "Use types that JSON has."
    missing = [name for name, option in cls.Options.model_fields.items() if option.is_required()]
    if missing:
        yield f"The options {', '.join(missing)} have no default.", "A stage must work when only its name is given."
        return
    options = cls.Options()
    again = cls.Options.model_validate_json(options.model_dump_json())
    if options != again:
        yield "Its options do not survive JSON.", "Configurations are stored as JSON and read back."


def _pickling(cls: type[Stage], options: Options | None) -> Iterator[tuple[str, str]]:
    stage = cls(options)
    try:
        again = pickle.loads(pickle.dumps(stage))
    except Exception as error:  # noqa: BLE001  # pickle raises many kinds
        yield f"It cannot be pickled ({error}).", "Define the class at module level and keep open files out of it."
        return
    if again.options != stage.options:
        yield "Its options do not survive pickling.", "Keep them in self.options."
