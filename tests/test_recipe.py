"""Recipes: what is written, what is read, what is refused and how."""

from __future__ import annotations

import dataclasses
import re
import tomllib
import typing

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scanclean.errors import RecipeError
from scanclean.recipe import Recipe, parse_recipe, read_recipe, to_toml
from scanclean.steps import OPERATIONS, PLACES, Step
from scanclean.units import Length

SECTIONS = {field.name: field for field in dataclasses.fields(Recipe) if field.name != "steps"}
KINDS = {name: typing.get_type_hints(Recipe)[name] for name in SECTIONS}
KEYS = [
    (section, field.name) for section, kind in KINDS.items() for field in dataclasses.fields(kind)
]


# ---- every recipe can be drawn


def lengths():
    return st.builds(
        Length,
        st.floats(0, 1e4, allow_nan=False).filter(lambda x: x == 0 or x > 1e-6),
        st.sampled_from(["mm", "pt", "px"]),
    )


def values(hint, metadata):
    """Values that a field may have, by its type and its metadata."""
    parts = [part for part in typing.get_args(hint) if part is not type(None)]
    if type(None) in typing.get_args(hint):
        (hint,) = parts
    low, high = metadata["low"], metadata["high"]
    if typing.get_origin(hint) is tuple:
        drawn = st.lists(st.sampled_from(metadata["choices"]), unique=True).map(tuple)
    elif metadata["choices"]:
        drawn = st.sampled_from(metadata["choices"])
    else:
        number = {"min_value": low, "max_value": high}
        drawn = {
            bool: st.booleans(),
            int: st.integers(
                -1000 if low is None else int(low), 1000 if high is None else int(high)
            ),
            float: st.floats(**number, allow_nan=False, allow_infinity=False),
            Length: lengths(),
            str: st.text(st.characters(exclude_categories=["Cs"]), max_size=20),
        }[hint]
    return st.none() | drawn if metadata["auto"] else drawn


def settings_of(kind):
    hints = typing.get_type_hints(kind)
    fields = {f.name: values(hints[f.name], f.metadata) for f in dataclasses.fields(kind)}
    return st.fixed_dictionaries(fields).map(lambda chosen: _built(kind, chosen)).filter(bool)


def _built(kind, chosen):
    try:
        return kind(**chosen)
    except ValueError:  # a combination that the stage itself refuses
        return None


PICTURES = st.lists(st.text("#.", min_size=3, max_size=3), min_size=1, max_size=4).map(
    lambda rows: "\n".join([*rows, "#O."]) + "\n"
)
ELEMENTS = st.one_of(
    st.fixed_dictionaries(
        {"element": st.just("line"), "length": lengths(), "angle": st.floats(-180, 180)}
    ),
    st.fixed_dictionaries({"element": st.just("box"), "width": lengths(), "height": lengths()}),
    st.fixed_dictionaries({"element": st.sampled_from(["disk", "diamond"]), "radius": lengths()}),
    st.fixed_dictionaries({"element": st.just("picture"), "picture": PICTURES}),
    st.fixed_dictionaries(
        {
            "element": st.just("picture"),
            "picture": st.just("#.#"),
            "origin": st.tuples(st.integers(-9, 9), st.integers(-9, 9)),
        }
    ),
)
PLAIN = sorted(set(OPERATIONS) - {"hit-or-miss", "thinning", "thickening"})
STEPS = st.builds(
    lambda element, **rest: Step(**element, **rest),
    ELEMENTS,
    operation=st.sampled_from(PLAIN),
    after=st.sampled_from(PLACES),
    claim=st.sampled_from(["speck", "rule", "edge", "shade"]),
    name=st.text(st.characters(exclude_categories=["Cs"]), max_size=12),
)
RECIPES = st.builds(
    Recipe,
    steps=st.lists(STEPS, max_size=3).map(tuple),
    **{name: settings_of(kind) for name, kind in KINDS.items()},
)


@given(RECIPES)
def test_what_is_printed_is_read_as_the_same_recipe(recipe):
    again = parse_recipe(to_toml(recipe))
    assert again == recipe
    assert again.identity == recipe.identity


@given(RECIPES, RECIPES)
def test_the_identity_tells_recipes_apart(one, other):
    assert (one.identity == other.identity) == (one == other)


def test_the_identity_is_that_of_the_values_not_of_the_text():
    written = parse_recipe('# my own\n[edges]\nmax_depth = " 30.0 mm "\nenabled = true\n')
    assert written.identity == Recipe().identity
    assert re.fullmatch("[0-9a-f]{64}", written.identity)


def test_nothing_written_is_the_default():
    assert parse_recipe("") == Recipe()


# ---- what is printed


def test_every_key_is_printed_with_its_default_under_its_explanation():
    lines = to_toml(Recipe()).splitlines()
    data = tomllib.loads(to_toml(Recipe()))
    assert list(data) == list(SECTIONS)
    for section, kind in KINDS.items():
        begin = lines.index(f"[{section}]")
        for field in dataclasses.fields(kind):
            (at,) = (
                i
                for i in range(begin + 1, begin + 1 + 2 * len(dataclasses.fields(kind)))
                if lines[i].startswith(f"{field.name} = ")
            )
            assert lines[at - 1].startswith(f"# {field.metadata['text']} (")
            if field.default is None:
                assert lines[at] == f'{field.name} = "auto"'
                assert '"auto"' in lines[at - 1]
            elif isinstance(field.default, Length):
                assert data[section][field.name] == str(field.default)
            else:
                assert data[section][field.name] == (
                    list(field.default) if isinstance(field.default, tuple) else field.default
                )
            for choice in field.metadata["choices"] or ():
                assert f'"{choice}"' in lines[at - 1]


def test_every_stage_explains_its_settings():
    for section, kind in KINDS.items():
        for field in dataclasses.fields(kind):
            text = field.metadata["text"]
            assert text, f"{section}.{field.name}"
            assert "\n" not in text, f"{section}.{field.name}"


def test_a_value_of_ones_own_is_printed_beside_the_default():
    printed = to_toml(parse_recipe('[edges]\nmax_depth = "12 mm"'))
    assert 'default "30 mm")\nmax_depth = "12 mm"\n' in printed


def test_how_a_step_is_written_is_printed_until_there_is_one():
    assert "# [[step]]" in to_toml(Recipe())
    example = to_toml(Recipe()).split("# such as:\n")[1]
    (step,) = parse_recipe(re.sub("^# ", "", example, flags=re.MULTILINE)).steps
    assert step.operation == "closing"
    one = parse_recipe('[[step]]\noperation = "opening"\nelement = "disk"\nradius = "0.1 mm"')
    assert '\n[[step]]\noperation = "opening"\n' in to_toml(one)


# ---- what is refused


def refused(text, **options):
    with pytest.raises(RecipeError) as caught:
        parse_recipe(text, name="mine.toml", **options)
    message = str(caught.value)
    assert "\n" not in message
    return message


@pytest.mark.parametrize(("section", "key"), KEYS)
def test_a_value_of_the_wrong_kind_is_refused_with_line_key_and_what_is_allowed(section, key):
    message = refused(f"# a comment\n\n[{section}]\n{key} = 1979-05-27\n")
    assert message.startswith(f"mine.toml, line 4: [{section}] {key} must be ")
    assert message.endswith("got 1979-05-27")


@pytest.mark.parametrize(("section", "key"), KEYS)
def test_a_misspelt_key_is_refused_with_the_nearest_one(section, key):
    wrong = key[:-1] + "q" + key[-1]
    message = refused(f"[{section}]\n\n{wrong} = 1\n")
    assert message.startswith(f"mine.toml, line 3: no key {wrong} in [{section}]")
    assert key in message.split("there are")[1]


@pytest.mark.parametrize(
    ("text", "line", "says"),
    [
        ("[edges]\nmax_dept = '1 mm'", 2, "did you mean max_depth?"),
        ("\n[egdes]\nx = 1", 2, "no section egdes (did you mean edges?)"),
        ("nothing = 1", 1, "no section nothing; there are: [threshold], [edges]"),
        ("edges = 3", 1, "[edges] is a section with keys of its own, got 3"),
        ("edges.max_depth = '3 furlong'", 1, '"0.25 mm", "9 pt" or "3 px", got "3 furlong"'),
        ("[edges]\nmax_depth = '-3 mm'", 2, 'got "-3 mm"'),
        ("[edges]\nmax_depth = 3", 2, "must be a length such as"),
        ("[edges]\nmax_depth = 'auto'", 2, 'got "auto"'),
        ("[edges]\nenabled = 1", 2, "must be true or false, got 1"),
        ("[edges]\nenabled = 'yes'", 2, 'must be true or false, got "yes"'),
        ("[threshold]\nlevel = true", 2, "must be a whole number from 0 to 256, got true"),
        ("[threshold]\nlevel = 12.0", 2, "must be a whole number from 0 to 256, got 12.0"),
        ("[threshold]\nlevel = 257", 2, "must be a whole number from 0 to 256, got 257"),
        ("[threshold]\nk = nan", 2, "got NaN"),
        ("[threshold]\nk = 5.01", 2, 'from 0 to 5 or "auto", got 5.01'),
        ("[threshold]\nmethod = 'otso'", 2, 'one of "adaptive", "sauvola"'),
        ("[threshold]\nmethod = '''\notsu\n'''", 2, r'got "otsu\n"'),
        ("[threshold]\n# a\nmethod = [\n 'otsu',\n]\n", 3, "got ['otsu']"),
        ("threshold = {method = 'otsu', level = 'x'}", 1, "[threshold] level must be"),
        ("[threshold]\nlevel = 3\n\n[threshold.k]\nx = 1", 4, "got a section"),
        ("[step]\noperation = 'opening'", 1, "[[step]], in double brackets"),
        ("[[step]]\nelement = 'disk'", 1, '[[step]] needs operation: one of "erosion"'),
        ("[[step]]\noperation = 'opening'\nelement = 'disk'", 1, "needs radius"),
        (
            "[[step]]\noperation = 'opening'\nelement = 'disk'\nradius = '1 mm'\n"
            "[[step]]\noperation = 'opening'\nelement = 'disk'\nradius = '1'",
            8,
            "[[step]] radius must be a length",
        ),
        (
            "[[step]]\noperation = 'opening'\nelement = 'disk'\nradius = '1 mm'\nwidth = '1 mm'",
            1,
            'element = "disk" takes radius, not width',
        ),
        (
            "[[step]]\noperation = 'erosion'\nelement = 'picture'\npicture = '''\n.#.\n#x#\n'''",
            1,
            "picture: a picture is made of # . O and o, got 'x'",
        ),
        (
            "[[step]]\noperation = 'erosion'\nelement = 'picture'\npicture = '''\n.#.\n###\n'''",
            1,
            "picture: a picture needs one origin",
        ),
        (
            "[[step]]\noperation = 'erosion'\nelement = 'picture'\norigin = [1, 2, 3]",
            4,
            "two whole numbers such as [3, -1], got [1, 2, 3]",
        ),
        (
            "[[step]]\noperation = 'hit-or-miss'\nelement = 'box'\nwidth='1 px'\nheight='1 px'",
            1,
            "miss (what must be paper)",
        ),
        ("[edges]\nmax_depth = ", 2, "no valid TOML: "),
        ("[edges]\nenabled = true\nenabled = true\n", 3, "no valid TOML: "),
        ("[edges]\n[edges]\n", 2, "no valid TOML: "),
        ("[edges]\nmax_depth = '''\n3 mm\n", 3, "no valid TOML: "),
    ],
)
def test_what_is_wrong_is_said_with_its_line(text, line, says):
    message = refused(text)
    assert message.startswith(f"mine.toml, line {line}: "), message
    assert says in message


def test_a_section_switched_off_is_read():
    assert parse_recipe("[edges]\nenabled = false").edges.enabled is False


def test_a_file_is_read_with_or_without_a_byte_order_mark(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_bytes(b"\xef\xbb\xbf[edges]\r\nenabled = false\r\n")
    assert read_recipe(path).edges.enabled is False


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"[edges]\n# caf\xe9\n", "mine.toml, line 2: a recipe is a text in UTF-8"),
        (b"\x89PNG\r\n\x1a\n\0\0", "mine.toml, line 1: "),
        (b"# " + b"x" * 300_000, "mine.toml: too large for a recipe"),
    ],
)
def test_a_file_that_is_no_recipe_is_refused(tmp_path, monkeypatch, data, says):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "mine.toml").write_bytes(data)
    with pytest.raises(RecipeError) as caught:
        read_recipe("mine.toml")
    assert str(caught.value).startswith(says)
    assert "\n" not in str(caught.value)


def test_a_file_that_is_not_there_is_refused(tmp_path):
    with pytest.raises(RecipeError, match="cannot be read: No such file"):
        read_recipe(tmp_path / "none.toml")
    with pytest.raises(RecipeError, match="cannot be read: Is a directory"):
        read_recipe(tmp_path)


@given(st.text(max_size=60))
def test_any_text_is_a_recipe_or_refused_in_a_line(text):
    try:
        outcome = to_toml(parse_recipe(text)).splitlines()[0]
    except RecipeError as error:
        outcome = str(error)
    assert re.fullmatch(r"# Recipe of scanclean\..*|recipe, line \d+: .+", outcome)
