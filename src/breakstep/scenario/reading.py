"""Reading a table against its model, key by key, so that one fault hides no other.

A plain validation would stop at the first faulty table and skip every rule that looks at two tables. So
each key is checked by itself; what is sound goes into a :class:`SoundPart`, and a rule that asks such a
part for something that is not there is skipped, never the rules beside it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import suppress
from functools import cache, reduce
from types import UnionType
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import ConfigDict, TypeAdapter, ValidationError
from pydantic.fields import FieldInfo

from breakstep.scenario.faults import Fault, did_you_mean, expected, in_words, join, one_of
from breakstep.scenario.sections import Section

Model = type[Section]


class NotSoundError(Exception):
    """Something a rule asked for was faulty or missing, so the rule says nothing. Never seen outside."""


class SoundPart:
    """The sound part of a table; asking for anything else raises NotSoundError."""

    def __init__(self, model: Model, values: Mapping[str, Any]) -> None:
        self._model = model
        self._values = values

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(name)
        if name not in self._values:
            raise NotSoundError(name)
        return self._values[name]

    def is_a(self, model: Model) -> bool:
        """Whether this is the sound part of such a table."""
        return issubclass(self._model, model)


Rule = Callable[[Any], Iterator[Fault]]


def apply_rules(rules: Iterable[Rule], whole: Any) -> list[Fault]:
    """Faults found by those rules whose facts are all sound."""
    faults: list[Fault] = []
    for rule in rules:
        try:
            faults.extend(rule(whole))
        except NotSoundError:
            continue
    return faults


class Reader:
    """Checks tables against their models and keeps every fault it meets."""

    def __init__(self) -> None:
        self.faults: list[Fault] = []

    def table(self, model: Model, table: Any, path: str = "") -> SoundPart:
        """Check one table and everything below it.

        Raises
        ------
        NotSoundError
            It is no table at all.
        """
        if not isinstance(table, Mapping):
            raise self._fault(path, f"expected a table, came {in_words(table)}")
        for key in table:
            if key not in model.model_fields:
                hint = did_you_mean(str(key), model.model_fields)
                self._fault(join(path, key), f"unknown key{hint}")
        values: dict[str, Any] = {}
        for name in model.model_fields:
            with suppress(NotSoundError):
                values[name] = self._key(model, name, table, path)
        return SoundPart(model, values)

    def _fault(self, path: str, text: str) -> NotSoundError:
        self.faults.append(Fault(path, text))
        return NotSoundError(path)

    def _key(self, model: Model, name: str, table: Mapping[str, Any], path: str) -> Any:
        info, place = model.model_fields[name], join(path, name)
        if name not in table:
            if info.is_required():
                raise self._fault(place, f"is missing; expected {info.description}")
            return _default(info)
        models, is_list = tables_of(info)
        if table[name] is None and not info.is_required():  # a resolved scenario says so where nothing was said
            return _default(info)
        if not models:
            return self._value(model, name, table[name], place)
        if is_list:
            return self._list(models[0], table[name], place)
        return self.table(self._by_kind(models, table[name], place), table[name], place)

    def _value(self, model: Model, name: str, value: Any, path: str) -> Any:
        try:
            return _adapter(model, name).validate_python(value)
        except ValidationError as error:
            for found in error.errors(include_url=False):
                steps = [step for step in found["loc"] if step != "[key]"]  # pydantic's mark for a table's key
                self._fault(reduce(join, steps, path), expected(found))
            raise NotSoundError(path) from None

    def _list(self, model: Model, items: Any, path: str) -> list[SoundPart]:
        if not isinstance(items, list) or not items:
            raise self._fault(path, f"expected a list of one or more tables, came {in_words(items)}")
        tables = []
        for number, item in enumerate(items):
            try:
                tables.append(self.table(model, item, join(path, number)))
            except NotSoundError:  # keep the numbers of those that follow
                tables.append(SoundPart(model, {}))
        return tables

    def _by_kind(self, models: list[Model], table: Any, path: str) -> Model:
        """Which of several models a table is for, by its key ``kind``."""
        if len(models) == 1:
            return models[0]
        if not isinstance(table, Mapping):
            raise self._fault(path, f"expected a table, came {in_words(table)}")
        by_kind = {kind_of(model): model for model in models}
        if "kind" not in table:
            raise self._fault(join(path, "kind"), f"is missing; expected one of {', '.join(by_kind)}")
        kind = table["kind"]
        if not isinstance(kind, str) or kind not in by_kind:
            raise self._fault(join(path, "kind"), one_of(by_kind, kind))
        return by_kind[kind]


def _default(info: FieldInfo) -> Any:
    value = info.get_default(call_default_factory=True, validated_data={})
    return SoundPart(type(value), dict(value)) if isinstance(value, Section) else value


@cache
def _adapter(model: Model, name: str) -> TypeAdapter[Any]:
    """What validates one key of a model by itself."""
    info = model.model_fields[name]
    kind: Any = info.annotation
    for mark in info.metadata:
        kind = Annotated[kind, mark]
    return TypeAdapter(kind, config=ConfigDict(strict=True, allow_inf_nan=False))


def kind_of(model: Model) -> str:
    """The word in ``kind`` that chooses a model."""
    return str(get_args(model.model_fields["kind"].annotation)[0])


def tables_of(info: FieldInfo) -> tuple[list[Model], bool]:
    """The models of the tables that a key may hold, and whether it holds a list of them."""
    annotation = info.annotation
    if get_origin(annotation) is tuple:
        inner = [item for item in get_args(annotation) if _is_model(item)]
        return inner, bool(inner)
    options = get_args(annotation) if get_origin(annotation) in (Union, UnionType) else (annotation,)
    return [option for option in options if _is_model(option)], False


def _is_model(kind: Any) -> bool:
    return isinstance(kind, type) and issubclass(kind, Section)
