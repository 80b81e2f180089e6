"""Compiles a checked document to a Rulebook: what one key says about another; depends on the rest of this folder."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from datetime import date
from functools import cache
from pathlib import Path as FilePath
from typing import Any, cast

from pydantic import BaseModel, Field, ValidationError, create_model

from sercheck.errors import RuleFileError
from sercheck.measure import Measure
from sercheck.measures import get, names
from sercheck.rulebook import budget, lengths
from sercheck.rulebook.after import read_after
from sercheck.rulebook.bounds import read_stays
from sercheck.rulebook.compiled import FalseHolds, Length, Rule, Rulebook, Transform
from sercheck.rulebook.mistakes import Mistakes, keys_of, shown
from sercheck.rulebook.model import Columns, FileKeys, RuleKeys
from sercheck.rulebook.places import Document, Path

LONGEST_CALENDAR = 1_000_000
"""Characters of a file of closed days (as of a rule file)."""


@cache
def _lenient(model: type[BaseModel]) -> type[BaseModel]:
    """The same model with nothing required: what is left to check when some keys are wrong."""
    optional: dict[str, Any] = {
        name: (field.rebuild_annotation(), Field(default=None, alias=field.alias))
        for name, field in model.model_fields.items()
        if field.is_required()
    }
    return create_model(f"Lenient{model.__name__}", __base__=model, **optional)


class Compiler:
    """Reads one document; every mistake is noted and the reading goes on."""

    def __init__(self, document: Document, folder: FilePath) -> None:
        self.document = document
        self.mistakes = Mistakes(document)
        self.folder = folder
        self.measures = names()
        self.seasons: Mapping[str, Length] | None = None
        self.columns: Columns | None = None
        self.every: str | None = None

    def compile(self) -> Rulebook | None:
        """The rulebook, or None when there are mistakes."""
        data = self.document.data
        if not isinstance(data, dict):
            came = "an empty file" if data is None else shown(data)
            self.mistakes.add((), came, "a mapping with the keys feed, columns, every and rules")
            return None
        known = {"a key of the file": FileKeys.model_fields, "a key of a rule": RuleKeys.model_fields}
        keys = cast("FileKeys", self._validated(FileKeys, data, (), known))
        self.columns, self.every = keys.columns, keys.every
        self.seasons = keys.seasons if self._sound(("seasons",), keys.seasons) else None
        self._cross_check(keys)
        closed = self._closed_days(keys.closed_days)
        rules = self._rules(keys)
        if self.mistakes.found:
            return None
        columns = keys.columns
        return Rulebook(
            feed=keys.feed,
            time=columns.time,
            series=columns.series,
            values=columns.values,
            every=keys.every,
            rules=tuple(rules),
            about=keys.about,
            timezone=keys.timezone,
            season_clock=keys.season_clock,
            closed_days=closed,
            seasons=keys.seasons,
            batch_every=keys.batch_every,
            false_holds=FalseHolds(*keys.false_holds) if keys.false_holds else None,
            tell=keys.tell,
            history=keys.history,
            baseline=keys.baseline,
            limits=keys.limits,
            path=self.document.source,
        )

    def _validated(self, model: type[BaseModel], data: dict[str, Any], base: Path, known: dict[str, Any]) -> BaseModel:
        """The model of a mapping; where keys are wrong, of those that are right."""
        try:
            return model.model_validate(data)
        except ValidationError as error:
            bad = self.mistakes.of_validation(error, base, model, known)
            return _lenient(model).model_validate({key: value for key, value in data.items() if key not in bad})

    def _sound(self, path: Path, read: object) -> bool:
        """Whether a key was read as written (an absent one is)."""
        return path not in self.document.values or bool(read) or not self.mistakes.value(path)

    def _cross_check(self, keys: FileKeys) -> None:
        if self.columns:
            self._check_columns(self.columns)
        if keys.false_holds and keys.false_alarm is not None:
            self.mistakes.add(("false_alarm",), "both 'false_alarm' and 'false_holds'", "one of the two", key=True)
        if keys.false_holds and keys.batch_every is None and ("batch_every",) not in self.document.values:
            self.mistakes.add(("false_holds",), "'false_holds' without 'batch_every'", "both",
                              "The risk of a batch follows from how often one comes.", key=True)  # fmt: skip
        if self.every:
            self._check_lengths(keys, self.every)

    def _check_columns(self, columns: Columns) -> None:
        seen = {columns.time: "time"}
        for role, given in (("series", columns.series), ("values", columns.values)):
            for name in given:
                if name in seen:
                    came = f"the column '{name}' as {seen[name]} and as {role}"
                    self.mistakes.add(("columns", role), came, "each column once")
                seen.setdefault(name, role)

    def _check_lengths(self, keys: FileKeys, every: str) -> None:
        """Lengths in time against the cadence."""
        for name, length in (self.seasons or {}).items():
            self._check_season(name, length, every)
        self._check_window(("window",), keys.window)
        step, apart = lengths.mean_seconds(every), lengths.mean_seconds(keys.batch_every or "irregular")
        if step and apart and apart < step * 0.9:  # months of 28 days are not shorter than a month
            self.mistakes.add(("batch_every",), shown(keys.batch_every), f"at least one step of the cadence ({every})")

    def _check_season(self, name: str, length: Length, every: str) -> None:
        if isinstance(length, int):
            return
        path = ("seasons", name)
        if every == "irregular":
            self.mistakes.add(path, shown(length), "a number of steps", "An irregular feed has no steps in time.")
        elif lengths.fixed(every):
            steps = lengths.seconds(length) / (lengths.mean_seconds(every) or 1.0)
            if abs(steps - round(steps)) > 1e-9 * steps or round(steps) < 2:
                self.mistakes.add(path, shown(length), f"a whole number of steps of {every}, at least 2")

    def _check_window(self, path: Path, window: Length | None) -> None:
        step = lengths.mean_seconds(self.every) if self.every else None
        if step and isinstance(window, str) and window != "batch" and lengths.seconds(window) < step * 0.9:
            self.mistakes.add(path, shown(window), f"at least one step of the cadence ({self.every})")

    def _closed_days(self, given: str | list[date] | None) -> tuple[date, ...]:
        if not isinstance(given, str):
            return tuple(sorted(set(given or ())))
        path = self.folder / given
        try:
            with path.open(encoding="utf-8-sig") as file:
                text = file.read(LONGEST_CALENDAR + 1)
        except (OSError, UnicodeDecodeError, ValueError) as trouble:
            reason = getattr(trouble, "strerror", None) or "it is no text"
            self.mistakes.add(("closed_days",), f"the file '{given}' cannot be read: {reason}",
                              "a file with one date a line, named from the rule file's folder")  # fmt: skip
            return ()
        return self._dates(text, str(path))

    def _dates(self, text: str, source: str) -> tuple[date, ...]:
        days: set[date] = set()
        if len(text) > LONGEST_CALENDAR:
            self.mistakes.add(("closed_days",), "a file of closed days that is far too long", "one date a line")
            return ()
        for number, line in enumerate(text.splitlines(), 1):
            word = line.split("#", 1)[0].strip()
            try:
                if word:
                    days.add(lengths.day(word))
            except ValueError as trouble:
                self.mistakes.found.append(RuleFileError(f"{source}:{number}:1", shown(word), trouble.args[0]))
        return tuple(sorted(days))

    def _rules(self, keys: FileKeys) -> list[Rule]:
        data = cast("dict[str, Any]", self.document.data).get("rules")
        if not isinstance(data, list):
            return []
        first: dict[str, int] = {}
        parsed: list[tuple[int, RuleKeys, type[Measure], dict[str, Any]]] = []
        for place, rule in enumerate(data):
            path = ("rules", place)
            if not isinstance(rule, dict):
                self.mistakes.add(path, shown(rule), "a mapping with the keys name, measure and stays")
                continue
            line = self.document.values[path][0]
            if isinstance(rule.get("name"), str) and first.setdefault(rule["name"], line) != line:
                came = f"the name '{rule['name']}' a second time"
                self.mistakes.add((*path, "name"), came, f"a name of its own (first in line {first[rule['name']]})")
            found = self._rule(rule, path, keys)
            if found:
                parsed.append((line, *found))
        if self.mistakes.found:
            return []
        shares = self._shares(keys, parsed)
        return [
            Rule(
                name=rule.name,
                measure=rule.measure,
                **compiled,
                only=rule.only,
                window=rule.window or keys.window,
                false_alarm=share.false_alarm,
                across=rule.across,
                matters=rule.matters,
                otherwise=rule.otherwise or keys.otherwise,
                when_undecided=rule.when_undecided or keys.when_undecided,
                tell=keys.tell if rule.tell is None else rule.tell,
                runbook=rule.runbook,
                about=rule.about,
                weight=share.weight,
                risk_from=share.risk_from,
                line=line,
            )
            for (line, rule, _, compiled), share in zip(parsed, shares, strict=True)
        ]

    def _shares(
        self, keys: FileKeys, parsed: list[tuple[int, RuleKeys, type[Measure], dict[str, Any]]]
    ) -> list[budget.Share]:
        claims = [
            budget.Claim(rule.otherwise or keys.otherwise, rule.false_alarm, rule.weight, measure)
            for _, rule, measure, _ in parsed
        ]
        risk = None
        if keys.false_holds and keys.batch_every:
            risk = budget.batch_risk(FalseHolds(*keys.false_holds), keys.batch_every)
        shares = budget.divide(claims, keys.false_alarm, risk)
        self._check_budget(claims, shares, risk)
        return shares

    def _check_budget(self, claims: list[budget.Claim], shares: list[budget.Share], risk: float | None) -> None:
        if risk is None:
            return
        if risk > budget.LARGEST_BATCH_RISK:
            came = f"a budget that gives one batch a risk of {risk:.3g}"
            todo = "Fewer false holds, or a longer period."
            self.mistakes.add(("false_holds",), came, f"at most {budget.LARGEST_BATCH_RISK}", todo)
        elif any(share.risk_from == "budget" and share.false_alarm <= 0 for share in shares):
            spent = sum(claim.false_alarm or 0.0 for claim in claims if claim.otherwise == "hold")
            came = (
                f"a budget of {risk:.3g} for one batch, of which rules with a false_alarm of their own take {spent:.3g}"
            )
            self.mistakes.add(("false_holds",), came, "something left for the other rules")

    def _rule(
        self, data: dict[str, Any], path: Path, keys: FileKeys
    ) -> tuple[RuleKeys, type[Measure], dict[str, Any]] | None:
        """A rule's common keys, its measure, and what was compiled from the keys that depend on it."""
        before = len(self.mistakes.found)
        known = {"a key of a rule": RuleKeys.model_fields}
        rule = cast(
            "RuleKeys",
            self._validated(RuleKeys, {k: v for k, v in data.items() if k in RuleKeys.model_fields}, path, known),
        )
        self._check_window((*path, "window"), rule.window)
        if rule.measure is None:
            return None
        if rule.measure not in self.measures:
            self.mistakes.unknown((*path, "measure"), "measure", rule.measure, self.measures)
            return None
        measure = type(get(rule.measure))
        compiled: dict[str, Any] = {
            "stays": read_stays(rule.stays, (*path, "stays"), rule.measure, measure, self.mistakes)
            if rule.stays is not None
            else None,
            "columns": self._of(rule, path, measure),
            "after": self._after(data, path, measure),
            "fields": self._fields(data, path, rule.measure, measure),
        }
        self._set_apart(rule, path, get(rule.measure), compiled)
        self._check_series(rule, path)
        self._check_weight(rule, path, measure, keys)
        return (rule, measure, compiled) if len(self.mistakes.found) == before else None

    def _of(self, rule: RuleKeys, path: Path, measure: type[Measure]) -> tuple[str, ...]:
        if not measure.of_values:
            if rule.of is not None:
                self.mistakes.add((*path, "of"), "'of' for a measure of the clock", "no 'of'",
                                  f"{rule.measure} reads no value column.", key=True)  # fmt: skip
            return ()
        if self.columns is None:
            return ()
        if not self.columns.values:
            came = f"the measure {rule.measure}, which reads values, in a feed without any"
            self.mistakes.add((*path, "measure"), came, "a list of value columns under 'columns: values'")
            return ()
        for place, name in enumerate(rule.of or ()):
            if name not in self.columns.values:
                listed = ("of", place) if ((*path, "of", place)) in self.document.values else ("of",)
                self.mistakes.unknown((*path, *listed), "value column", name, self.columns.values)
        return rule.of or self.columns.values

    def _after(self, data: dict[str, Any], path: Path, measure: type[Measure]) -> tuple[Transform, ...]:
        if "after" not in data:
            return ()
        if not measure.of_values:
            self.mistakes.add((*path, "after"), "'after' for a measure of the clock", "no 'after'",
                              "It reads no values that could be transformed.", key=True)  # fmt: skip
            return ()
        return read_after(data["after"], (*path, "after"), self.seasons, self.mistakes)

    def _fields(self, data: dict[str, Any], path: Path, name: str, measure: type[Measure]) -> BaseModel | None:
        """The measure's own fields, by its own model (strict: a text is no number)."""
        given = {key: value for key, value in data.items() if key not in RuleKeys.model_fields}
        known = {
            f"a key of the measure {name}": keys_of(measure.Fields),
            "a key of every rule": RuleKeys.model_fields,
            "a key of the file, not of a rule": FileKeys.model_fields,
        }
        self._check_references(given, path)
        try:
            return measure.Fields.model_validate_json(json.dumps(given), strict=True)
        except ValidationError as error:
            bad = self.mistakes.of_validation(error, path, measure.Fields, known, more=RuleKeys.model_fields)
            if bad:
                self._keys_together({key: value for key, value in given.items() if key not in bad}, bad, path, measure)
            return None

    def _keys_together(self, given: dict[str, Any], bad: set[str], path: Path, measure: type[Measure]) -> None:
        """What the right keys of a measure say against each other, which is not looked at while others are wrong."""
        try:
            _lenient(measure.Fields).model_validate_json(json.dumps(given), strict=True)
        except ValidationError as error:
            for detail in error.errors(include_url=False):
                if not detail["loc"]:
                    self.mistakes.of_keys(detail, path, keys_of(measure.Fields), but=bad)
        except (TypeError, AttributeError):
            return  # a check that reads a key which is missing or wrong

    def _check_references(self, given: dict[str, Any], path: Path) -> None:
        """A season or a value column that a measure's field names must be there."""
        season = given.get("season")
        if isinstance(season, str) and self.seasons is not None and season not in self.seasons:
            self.mistakes.unknown((*path, "season"), "season of this file", season, self.seasons,
                                  "Declare it under 'seasons'.")  # fmt: skip
        other = given.get("with")
        if isinstance(other, str) and self.columns and other not in self.columns.values:
            self.mistakes.unknown((*path, "with"), "value column", other, self.columns.values)

    def _set_apart(self, rule: RuleKeys, path: Path, measure: Measure, compiled: dict[str, Any]) -> None:
        """A column that the measure's fields name is compared with the others, never with itself."""
        others = measure.beside(compiled["fields"]) if compiled["fields"] else ()
        for name in set(others) & set(rule.of or ()):
            came = f"the value column '{name}' against itself"
            self.mistakes.add((*path, "of"), came, f"columns of which '{name}' is none")
        compiled["columns"] = tuple(name for name in compiled["columns"] if name not in others)
        if others and not rule.of and self.columns and self.columns.values and not compiled["columns"]:
            came = f"the measure {rule.measure} in a feed whose only value column is '{others[0]}'"
            self.mistakes.add((*path, "measure"), came, "another column under 'columns: values' to compare it with")

    def _check_series(self, rule: RuleKeys, path: Path) -> None:
        if rule.only and self.columns and not self.columns.series:
            self.mistakes.add((*path, "only"), "'only' in a feed of one series", "a key under 'columns: series'",
                              "Leave 'only' out.", key=True)  # fmt: skip

    def _check_weight(self, rule: RuleKeys, path: Path, measure: type[Measure], keys: FileKeys) -> None:
        """A key of the budget that would change nothing is a misunderstanding."""
        if rule.weight is not None and rule.false_alarm is not None:
            self.mistakes.add((*path, "weight"), "both 'weight' and 'false_alarm'", "one of the two", key=True)
        elif rule.weight is not None and not keys.false_holds and not self._written("false_holds"):
            self.mistakes.add((*path, "weight"), "'weight' without a budget", "'false_holds' in the file",
                              "It is a share of the alarm budget.", key=True)  # fmt: skip
        for word, given in (("weight", rule.weight), ("false_alarm", rule.false_alarm)):
            if given is not None and measure.exact:
                self.mistakes.add((*path, word), f"'{word}' for {rule.measure}", f"no '{word}'",
                                  "It has no sampling error and takes no risk.", key=True)  # fmt: skip

    def _written(self, key: str) -> bool:
        return (key,) in self.document.values


def resolved(history: tuple[str, ...], folder: FilePath) -> tuple[str, ...]:
    """History's paths from the rule file's folder; databases and URLs as they are."""
    return tuple(name if re.match(r"^(db:|[a-z][a-z0-9+.-]*://)", name) else str(folder / name) for name in history)
