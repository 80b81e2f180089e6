"""Finds the measures: one file of this folder each, or a class announced by another installed package.

Depends only on the measure contract and on the errors; a measure's file is imported when it is asked for.
"""

from __future__ import annotations

import inspect
import pkgutil
import sys
from difflib import get_close_matches
from functools import cache
from importlib import import_module, metadata

from sercheck.errors import UsageError
from sercheck.measure import Measure

GROUP = "sercheck.measures"
"""Entry-point group under which another package announces its measures."""

BREAKS = (ImportError, SyntaxError, NameError, AttributeError, TypeError, ValueError, LookupError, RuntimeError)
"""What a broken file raises when it is imported."""


def names() -> tuple[str, ...]:
    """Names of all measures, sorted; nothing is imported.

    Raises:
        UsageError: when two measures have the same name.
    """
    return tuple(sorted({*_own(), *_announced(tuple(sys.path))}))


def get(name: str) -> Measure:
    """The measure of that name; only its own file is imported.

    Raises:
        UsageError: when there is none of that name, when two have it, or when it cannot be loaded.
    """
    if name not in names():
        close = get_close_matches(name, names(), n=1)
        todo = f"Did you mean {close[0]}?" if close else ""
        raise UsageError(f"measure {name}", "no such measure", f"one of {', '.join(names())}", todo)
    return _load(name, _announced(tuple(sys.path)).get(name))


def text_of(measure: Measure) -> str:
    """The documentation of a measure: the docstring of its class, or of its module where the class has none."""
    module = sys.modules[type(measure).__module__]
    own = module.__doc__ if type(measure).__module__.startswith(f"{__name__}.") else type(measure).__doc__
    return inspect.cleandoc(own or type(measure).__doc__ or module.__doc__ or "")


@cache
def _own() -> frozenset[str]:
    return frozenset(found.name for found in pkgutil.iter_modules(__path__) if not found.name.startswith("_"))


@cache
def _announced(_: tuple[str, ...]) -> dict[str, metadata.EntryPoint]:
    """Measures of other packages; looked up again only when the path of imports changes."""
    found: dict[str, metadata.EntryPoint] = {}
    for point in metadata.entry_points(group=GROUP):
        other = "sercheck itself" if point.name in _own() else found[point.name].value if point.name in found else ""
        if other and other != point.value:
            raise UsageError(
                f"measure {point.name}",
                f"two measures have this name: {other} and {point.value}",
                todo="Rename or uninstall one of them.",
            )
        found[point.name] = point
    return found


@cache
def _load(name: str, point: metadata.EntryPoint | None) -> Measure:
    place = point.value if point else f"{__name__}.{name}"
    try:
        target: object = point.load() if point else _only_class(f"{__name__}.{name}")
        if not (isinstance(target, type) and issubclass(target, Measure)):
            raise TypeError(f"{target!r} is not a subclass of sercheck.measure.Measure")
        for asked in ("Fields", "kinds"):
            if not hasattr(target, asked):
                raise TypeError(f"{target.__name__} has no {asked}")
        return target()
    except BREAKS as reason:
        raise UsageError(
            f"measure {name} ({place})",
            f"cannot be loaded: {type(reason).__name__}: {reason}",
            todo="Mend it, or uninstall the package that announces it.",
        ) from reason


def _only_class(module: str) -> type[Measure]:
    """The one measure that a module defines."""
    loaded = import_module(module)
    found = [
        member
        for member in vars(loaded).values()
        if isinstance(member, type)
        and issubclass(member, Measure)
        and member.__module__ == module
        and not inspect.isabstract(member)
    ]
    if len(found) != 1:
        raise TypeError(f"the file defines {len(found)} subclasses of Measure where exactly one belongs")
    return found[0]
