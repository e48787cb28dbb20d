"""Recipes: the settings of every stage, as a TOML file and as one frozen value.

A section is a stage; its keys are the fields of the stage's own settings, which bring their
defaults, limits and explanations along. Nothing is said twice: what `Recipe` lists is what can be
read, checked, printed and hashed.
"""

from __future__ import annotations

import difflib
import hashlib
import json
import math
import re
import tomllib
import types
import typing
from collections.abc import Callable, Iterable, Iterator
from dataclasses import Field, dataclass, field, fields
from decimal import Decimal
from functools import cache, cached_property
from pathlib import Path
from typing import Any

from scanclean.errors import RecipeError
from scanclean.ink.edges import EdgeSettings
from scanclean.ink.holes import HoleSettings
from scanclean.ink.threshold import ThresholdSettings
from scanclean.rules.ruling import RuleSettings
from scanclean.steps import Step
from scanclean.text.specks import SpeckSettings
from scanclean.units import Length

__all__ = ["Recipe", "parse_recipe", "read_recipe", "to_toml"]

_MAX_BYTES = 200_000  # a recipe with every key and hundreds of steps is far below
_STEP = "step"  # the table of one step, repeated: [[step]]
_PICTURES = ("picture", "miss")
_EXAMPLE = Step(operation="closing", after="specks", element="disk", radius=Length(0.05, "mm"))


@dataclass(frozen=True)
class Recipe:
    r"""Everything that decides how a page is cleaned: a section a stage, and added steps.

    Examples
    --------
    >>> recipe = parse_recipe('[holes]\nmax_width = "0.1 mm"')
    >>> str(recipe.holes.max_width)
    '0.1 mm'
    """

    threshold: ThresholdSettings = field(default_factory=ThresholdSettings)
    edges: EdgeSettings = field(default_factory=EdgeSettings)
    rules: RuleSettings = field(default_factory=RuleSettings)
    holes: HoleSettings = field(default_factory=HoleSettings)
    specks: SpeckSettings = field(default_factory=SpeckSettings)
    steps: tuple[Step, ...] = ()

    @cached_property
    def identity(self) -> str:
        """SHA-256 of all values: equal recipes have equal ones, however they were written."""
        values = {name: _plain(getattr(self, name)) for name in _sections()}
        steps = [_plain(step) for step in self.steps]
        canonical = json.dumps({**values, _STEP: steps}, sort_keys=True, ensure_ascii=True)
        return hashlib.sha256(canonical.encode("ascii")).hexdigest()


def read_recipe(path: str | Path) -> Recipe:
    """The recipe in a TOML file; what it leaves out has its default.

    Raises
    ------
    RecipeError
        If the file cannot be read, or as `parse_recipe` does.
    """
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        raise RecipeError(f"{path}: cannot be read: {error.strerror or error}") from None
    if len(data) > _MAX_BYTES:
        raise RecipeError(f"{path}: too large for a recipe ({len(data)} bytes)")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise RecipeError(f"{path}, line {line}: a recipe is a text in UTF-8") from None
    return parse_recipe(text, name=str(path))


def parse_recipe(text: str, *, name: str = "recipe") -> Recipe:
    """The recipe in a TOML text.

    Parameters
    ----------
    text : str
    name : str
        What messages call the text.

    Raises
    ------
    RecipeError
        If it is no TOML, or a section, key or value is not allowed: one line with the name, the
        line, the key and what is allowed.
    """
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise RecipeError(_syntax_error(text, name, str(error))) from None
    try:
        return _recipe(data)
    except _ValueRefusedError as error:
        line = _line_of(text, error.place)
        raise RecipeError(f"{name}, line {line}: {error}") from None


def to_toml(recipe: Recipe) -> str:
    """The recipe with every key, its value, its unit and a line of explanation.

    `parse_recipe` makes the same recipe of it.
    """
    blocks = [
        "# Recipe of scanclean. A key that is left out has its default.\n"
        '# Lengths carry their unit: "0.25 mm", "9 pt" (1/72 inch) or "3 px";\n'
        '# where "auto" is allowed, the page\'s own measures decide.\n'
    ]
    for name, kind in _sections().items():
        blocks.append(_section_toml(f"[{name}]", getattr(recipe, name), kind()))
    if not recipe.steps:
        blocks.append(_step_help())
    blocks += [_step_toml(step) for step in recipe.steps]
    return "\n".join(blocks)


# ---- what a recipe is made of


@cache
def _sections() -> dict[str, type[Any]]:
    """The settings class of each section, in the order in which they are printed."""
    hints = typing.get_type_hints(Recipe)
    return {each.name: hints[each.name] for each in fields(Recipe) if each.name != "steps"}


@dataclass(frozen=True)
class _Key:
    """A key of a section: its name, its type without None, its default and its limits."""

    name: str
    kind: Any
    default: Any
    text: str
    choices: tuple[str, ...] | None
    low: float | None
    high: float | None
    auto: bool

    @property
    def allowed(self) -> str:
        """What a value may be, in words."""
        if self.choices:
            quoted = ", ".join(f'"{choice}"' for choice in self.choices)
            words = f"a list of {quoted}" if _is_tuple(self.kind) else f"one of {quoted}"
        elif self.kind is Length:
            words = 'a length such as "0.25 mm", "9 pt" or "3 px"'
        else:
            words = {
                bool: "true or false",
                int: "a whole number",
                float: "a number",
                str: "a text in quotes",
            }.get(self.kind, "two whole numbers such as [3, -1]")
        if self.kind is not bool and (self.low is not None or self.high is not None):
            words += _range(self.low, self.high)
        return words + (' or "auto"' if self.auto else "")


def _keys(kind: type[Any]) -> dict[str, _Key]:
    """The keys of a settings class."""
    hints = typing.get_type_hints(kind)
    return {each.name: _key(each, hints[each.name]) for each in fields(kind)}


def _key(declared: Field[Any], hint: Any) -> _Key:
    if isinstance(hint, types.UnionType):  # X | None
        (hint,) = (part for part in typing.get_args(hint) if part is not types.NoneType)
    return _Key(declared.name, hint, declared.default, **declared.metadata)


def _is_tuple(kind: Any) -> bool:
    return typing.get_origin(kind) is tuple


def _range(low: float | None, high: float | None) -> str:
    if low is None or high is None:
        return f" of at least {low:g}" if high is None else f" of at most {high:g}"
    return f" from {low:g} to {high:g}"


# ---- reading and checking


class _ValueRefusedError(Exception):
    """A value that is not allowed, at a place such as ("step", 0, "radius")."""

    def __init__(self, place: tuple[str | int, ...], message: str) -> None:
        super().__init__(message)
        self.place = place


def _recipe(data: dict[str, Any]) -> Recipe:
    sections = _sections()
    for name in data:
        if name not in sections and name != _STEP:
            shown = [f"[{section}]" for section in sections] + [f"[[{_STEP}]]"]
            raise _ValueRefusedError(
                (name,), f"no section {name}{_near(name, sections)}: {_join(shown)}"
            )
    values: dict[str, Any] = {}
    for name, kind in sections.items():
        if name in data:
            values[name] = _settings(data[name], kind, (name,), f"[{name}]")
    steps = data.get(_STEP, [])
    if not isinstance(steps, list):
        raise _ValueRefusedError((_STEP,), f"a step is a table [[{_STEP}]], in double brackets")
    values["steps"] = tuple(
        _settings(step, Step, (_STEP, i), f"[[{_STEP}]]", needed=("operation", "element"))
        for i, step in enumerate(steps)
    )
    return Recipe(**values)


def _settings(
    table: object,
    kind: type[Any],
    place: tuple[str | int, ...],
    title: str,
    *,
    needed: tuple[str, ...] = (),
) -> Any:
    if not isinstance(table, dict):
        raise _ValueRefusedError(
            place, f"{title} is a section with keys of its own, got {_shown(table)}"
        )
    keys = _keys(kind)
    for name in table:
        if name not in keys:
            raise _ValueRefusedError(
                (*place, name), f"no key {name} in {title}{_near(name, keys)}: {_join(keys)}"
            )
    for name in needed:
        if name not in table:
            raise _ValueRefusedError(place, f"{title} needs {name}: {keys[name].allowed}")
    values = {}
    for name, value in table.items():
        try:
            values[name] = _value(value, keys[name])
        except ValueError:
            message = f"{title} {name} must be {keys[name].allowed}, got {_shown(value)}"
            raise _ValueRefusedError((*place, name), message) from None
    try:
        return kind(**values)
    except ValueError as error:
        raise _ValueRefusedError(place, f"{title} {error}") from None


def _value(value: object, key: _Key) -> Any:
    """The checked value of a key; ValueError where it is not allowed."""
    if key.auto and value == "auto":
        return None
    checked = _READERS[tuple if _is_tuple(key.kind) else key.kind](value, key)
    size = checked.value if isinstance(checked, Length) else checked
    if isinstance(size, (int, float)) and not isinstance(size, bool):
        low = -math.inf if key.low is None else key.low
        high = math.inf if key.high is None else key.high
        if not low <= size <= high:
            raise ValueError
    return checked


def _read_bool(value: object, _: _Key) -> bool:
    if not isinstance(value, bool):
        raise ValueError
    return value


def _read_int(value: object, _: _Key) -> int:
    if not isinstance(value, int) or isinstance(value, bool):
        raise ValueError
    return value


def _read_float(value: object, _: _Key) -> float:
    if not isinstance(value, (int, float)) or isinstance(value, bool) or not math.isfinite(value):
        raise ValueError
    return float(value)


def _read_text(value: object, key: _Key) -> str:
    if not isinstance(value, str) or (key.choices and value not in key.choices):
        raise ValueError
    return value


def _read_length(value: object, _: _Key) -> Length:
    if not isinstance(value, str):
        raise ValueError
    return Length.parse(value)


def _read_tuple(value: object, key: _Key) -> tuple[Any, ...]:
    """Words of `choices`, each once; or as many whole numbers as the type has."""
    if not isinstance(value, list):
        raise ValueError
    if key.choices:
        if not set(value) <= set(key.choices) or len(set(value)) < len(value):
            raise ValueError
        return tuple(value)
    if len(value) != len(typing.get_args(key.kind)):
        raise ValueError
    return tuple(_read_int(part, key) for part in value)


_READERS: dict[Any, Callable[[object, _Key], Any]] = {
    bool: _read_bool,
    int: _read_int,
    float: _read_float,
    str: _read_text,
    Length: _read_length,
    tuple: _read_tuple,
}


def _near(name: str, known: Iterable[str]) -> str:
    close = difflib.get_close_matches(name, list(known), n=1)
    return f" (did you mean {close[0]}?); there are" if close else "; there are"


def _join(names: Iterable[str]) -> str:
    return ", ".join(names)


def _shown(value: object) -> str:
    """A value as the recipe has it, short."""
    if isinstance(value, (str, bool, int, float)):
        text = json.dumps(value, ensure_ascii=False)
    else:
        text = "a section" if isinstance(value, dict) else str(value)
    return text if len(text) <= 40 else text[:37] + "..."


# ---- where in the text


def _line_of(text: str, place: tuple[str | int, ...]) -> int:
    """The line, from 1, on which the value at a place begins.

    The parser itself is asked: a statement has been read once the text up to some line is valid
    TOML and has the value, and it began after the last such line before. That holds for dotted
    keys, inline tables and texts of several lines alike. Only ever done for a recipe in error.
    """
    lines = text.split("\n")
    begin = 0
    for end in range(1, len(lines) + 1):
        try:
            data: Any = tomllib.loads("\n".join(lines[:end]))
        except tomllib.TOMLDecodeError:
            continue
        if _has(data, place):
            break
        begin = end
    return begin + 1


def _has(data: Any, place: tuple[str | int, ...]) -> bool:
    for part in place:
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            return False
    return True


def _syntax_error(text: str, name: str, message: str) -> str:
    found = re.fullmatch(r"(.*?) \(at (?:line (\d+), column (\d+)|end of document)\)", message)
    what = found[1] if found else message
    line = found[2] if found and found[2] else text.rstrip("\n").count("\n") + 1
    return f"{name}, line {line}: no valid TOML: {what[:1].lower()}{what[1:]}"


# ---- writing


def _plain(settings: Any) -> dict[str, Any]:
    """The values of settings as numbers and texts, lengths as written."""
    values = {each.name: getattr(settings, each.name) for each in fields(settings)}
    return {
        name: _length_text(value) if isinstance(value, Length) else value
        for name, value in values.items()
    }


def _section_toml(title: str, settings: Any, default: Any) -> str:
    lines = [title]
    for name, key in _keys(type(settings)).items():
        value, usual = getattr(settings, name), getattr(default, name)
        lines.append(f"# {key.text} ({'; '.join(_remarks(key, value, usual))})")
        lines.append(f"{name} = {_toml(value)}")
    return "\n".join(lines) + "\n"


def _remarks(key: _Key, value: object, usual: object) -> Iterator[str]:
    """What may stand here and, where another value does, the default."""
    yield "a length" + (' or "auto"' if key.auto else "") if key.kind is Length else key.allowed
    if value != usual:
        yield f"default {_toml(usual)}"


def _step_toml(step: Step) -> str:
    """A step with the keys that are not at their default, but always what it does."""
    lines = [f"[[{_STEP}]]"]
    for name, key in _keys(Step).items():
        value = getattr(step, name)
        if value != key.default or name in ("operation", "element", "after", "claim"):
            lines.append(f"{name} = {_picture(value) if name in _PICTURES else _toml(value)}")
    return "\n".join(lines) + "\n"


def _step_help() -> str:
    """How a step is written, as a comment."""
    lines = [
        "Morphological steps of your own come in the order in which they stand here, each as",
        f"[[{_STEP}]]",
    ]
    lines += [f"{name}: {key.text} ({key.allowed})" for name, key in _keys(Step).items()]
    lines += ["such as:", *_step_toml(_EXAMPLE).splitlines()]
    return "".join(f"# {line}\n" for line in lines)


def _toml(value: object) -> str:
    if value is None:
        return '"auto"'
    if isinstance(value, Length):
        return f'"{_length_text(value)}"'
    if isinstance(value, str):
        # a JSON text is a TOML basic string, but for one control character that JSON leaves be
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, tuple):
        return "[" + ", ".join(map(_toml, value)) + "]"
    if isinstance(value, bool):
        return str(value).lower()
    return repr(value)


def _picture(value: str) -> str:
    """A literal text of several lines where TOML allows it: no quotes to confuse a picture."""
    plain = all(c == "\n" or c == "\t" or " " <= c <= "~" for c in value) and "'" not in value
    return f"'''\n{value}'''" if plain else _toml(value)


def _length_text(length: Length) -> str:
    """With every digit, where ``str`` rounds to six, and without an exponent."""
    return f"{Decimal(repr(float(length.value))).normalize():f} {length.unit}"
