"""Layouts: the same page gives the same bytes, the schema holds them, and they come back."""

from __future__ import annotations

import copy
import json
import os
import time
from dataclasses import replace

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from scanclean.errors import PageError
from scanclean.layout import Layout, Source, layout_schema, read_layout

SHA = "0123456789abcdef" * 4

# The example of the agreed format, word for word but for the hash, which it leaves out
AGREED = {
    "format": "scanclean-layout",
    "version": 1,
    "source": {
        "file": "folio7.png",
        "page": 1,
        "sha256": SHA,
        "width": 2480,
        "height": 3508,
        "dpi": [300.0, 300.0],
    },
    "page": {
        "width": 2480,
        "height": 3508,
        "skew_degrees": 0.42,
        "to_source": [[1, 0, 0], [0, 1, 0]],
    },
    "measures": {"stroke_px": 4.1, "x_height_px": 21, "ink_share": 0.061, "specks": 184},
    "flags": ["specks-dense"],
    "lines": [
        {
            "id": 1,
            "box": [210, 300, 2201, 352],
            "baseline": [[210, 341.5], [2201, 343.0]],
            "x_height_px": 21.0,
        }
    ],
    "glyphs": [
        {
            "id": 1,
            "line": 1,
            "word": 1,
            "box": [210, 309, 238, 342],
            "area": 402,
            "parts": 1,
            "holes": 1,
        }
    ],
    "rules": [
        {"id": 1, "direction": "horizontal", "box": [100, 343, 2380, 348], "thickness_px": 3.6}
    ],
}


def agreed() -> Layout:
    return Layout(
        source=Source("folio7.png", 1, SHA, 2480, 3508, (300.0, 300.0)),
        width=2480,
        height=3508,
        skew_degrees=0.42,
        to_source=np.eye(3)[:2],
        measures={"stroke_px": 4.1, "x_height_px": 21, "ink_share": 0.061, "specks": 184},
        flags=("specks-dense",),
        lines={
            "box": np.array([[210, 300, 2201, 352]]),
            "baseline": np.array([[[210, 341.5], [2201, 343.0]]]),
            "x_height_px": np.array([21.0]),
        },
        glyphs={
            "line": np.array([1]),
            "word": np.array([1]),
            "box": np.array([[210, 309, 238, 342]]),
            "area": np.array([402]),
            "parts": np.array([1]),
            "holes": np.array([1]),
        },
        rules={
            "direction": np.array(["horizontal"]),
            "box": np.array([[100, 343, 2380, 348]]),
            "thickness_px": np.array([3.6]),
        },
    )


def valid(data) -> None:
    jsonschema.validate(data, layout_schema(), cls=jsonschema.Draft202012Validator)


def test_the_agreed_example_is_what_is_written():
    assert json.loads(agreed().to_json()) == AGREED


def test_the_agreed_example_is_valid_and_the_schema_is_one():
    jsonschema.Draft202012Validator.check_schema(layout_schema())
    assert layout_schema()["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    valid(AGREED)


def test_a_glyph_and_a_line_and_a_rule_stand_on_a_line_each():
    lines = agreed().to_json().splitlines()
    assert lines[0] == "{"
    assert sum(line.startswith('    {"id": 1, ') for line in lines) == 3
    assert lines[-1] == "}"


def test_an_empty_page_is_a_layout():
    nothing = Layout(
        source=Source("blank.tif", 2, SHA, 1, 1, (204.0, 98.0)),
        width=1,
        height=1,
        skew_degrees=0.0,
        to_source=np.eye(3)[:2],
        measures={"stroke_px": None, "x_height_px": None, "ink_share": 0.0, "specks": 0},
        flags=(),
        lines={"box": np.empty((0, 4), int), "baseline": np.empty((0, 2, 2))},
        glyphs={},
        rules={"direction": np.empty(0, str)},
    )
    data = json.loads(nothing.to_json())
    valid(data)
    assert data["lines"] == data["glyphs"] == data["rules"] == []
    again = Layout.from_json(nothing.to_json())
    assert again.glyphs["box"].shape == (0, 4)
    assert again.lines["baseline"].shape == (0, 2, 2)


# ---- what the schema refuses


def _set(data, path, value):
    *parents, last = path
    for part in parents:
        data = data[part]
    if value is ...:
        del data[last]
    else:
        data[last] = value


WRONG = [
    *[((key,), ...) for key in AGREED],
    (("format",), "other"),
    (("version",), 2),
    (("more",), 1),
    (("source", "sha256"), SHA[:-1]),
    (("source", "sha256"), SHA.upper()),
    (("source", "page"), 0),
    (("source", "dpi"), [300.0]),
    (("source", "dpi"), [300.0, 0]),
    (("source", "dpi"), [300.0, 300.0, 300.0]),
    (("source", "width"), 0),
    (("source", "file"), ""),
    (("page", "skew_degrees"), "none"),
    (("page", "skew_degrees"), 90),
    (("page", "to_source"), [[1, 0, 0], [0, 1]]),
    (("page", "to_source"), [[1, 0, 0], [0, 1, 0], [0, 0, 1]]),
    (("measures", "specks"), -1),
    (("measures", "specks"), 1.5),
    (("measures", "ink_share"), 1.01),
    (("measures", "stroke_px"), 0),
    (("measures", "stroke_px"), ...),
    (("measures", "other"), "text"),
    (("measures", "Other"), 1),
    (("flags",), ["specks-dense", "specks-dense"]),
    (("flags",), ["Specks dense"]),
    (("lines", 0, "id"), 0),
    (("lines", 0, "box"), [1, 2, 3]),
    (("lines", 0, "box"), [1, 2, 3, 4.5]),
    (("lines", 0, "box"), [-1, 2, 3, 4]),
    (("lines", 0, "baseline"), [[1, 2]]),
    (("lines", 0, "baseline"), [[1, 2], [3, 4, 5]]),
    (("lines", 0, "x_height_px"), 0),
    (("lines", 0, "more"), 1),
    (("glyphs", 0, "line"), 0),
    (("glyphs", 0, "area"), 0),
    (("glyphs", 0, "parts"), 0),
    (("glyphs", 0, "holes"), -1),
    (("glyphs", 0, "holes"), ...),
    (("glyphs", 0, "more"), 1),
    (("rules", 0, "direction"), "slanting"),
    (("rules", 0, "thickness_px"), -3.6),
    (("rules", 0, "more"), 1),
]


@pytest.mark.parametrize(("path", "value"), WRONG)
def test_the_schema_refuses(path, value):
    data = copy.deepcopy(AGREED)
    _set(data, path, value)
    with pytest.raises(jsonschema.ValidationError):
        valid(data)


# ---- round trip


@st.composite
def layouts(draw):
    """Layouts of any size with numbers already as coarse as the file keeps them."""
    n_lines, n_glyphs, n_rules = (draw(st.integers(0, 4)) for _ in range(3))
    whole = st.integers(0, 100_000)
    part = st.integers(-(10**6), 10**6).map(lambda x: x / 1000)

    def ints(*shape, least=0):
        return draw(hnp.arrays(np.int64, shape, elements=st.integers(least, 100_000)))

    def floats(*shape, elements=part):
        return draw(hnp.arrays(np.float64, shape, elements=elements))

    above_zero = st.integers(1, 10**6).map(lambda x: x / 1000)
    return Layout(
        source=Source(
            draw(st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=9)),
            draw(whole) + 1,
            SHA,
            draw(whole) + 1,
            draw(whole) + 1,
            (draw(above_zero), draw(above_zero)),
        ),
        width=draw(whole) + 1,
        height=draw(whole) + 1,
        skew_degrees=draw(st.integers(-89999, 89999).map(lambda x: x / 1000)),
        to_source=floats(2, 3),
        measures={
            "stroke_px": draw(st.none() | above_zero),
            "x_height_px": draw(st.none() | above_zero),
            "ink_share": draw(st.integers(0, 1000).map(lambda x: x / 1000)),
            "specks": draw(whole),
        },
        flags=tuple(draw(st.lists(st.sampled_from(["blank", "dpi-estimated"]), unique=True))),
        lines={
            "box": ints(n_lines, 4),
            "baseline": floats(n_lines, 2, 2),
            "x_height_px": floats(n_lines, elements=above_zero),
        },
        glyphs={
            "line": ints(n_glyphs),  # 0: in no line
            "word": ints(n_glyphs),
            "box": ints(n_glyphs, 4),
            "area": ints(n_glyphs, least=1),
            "parts": ints(n_glyphs, least=1),
            "holes": ints(n_glyphs),
        },
        rules={
            "direction": draw(
                hnp.arrays("U10", n_rules, elements=st.sampled_from(["horizontal", "vertical"]))
            ),
            "box": ints(n_rules, 4),
            "thickness_px": floats(n_rules, elements=above_zero),
        },
    )


@given(layouts())
def test_a_layout_comes_back_as_it_was_and_is_valid(layout):
    text = layout.to_json()
    valid(json.loads(text))
    again = Layout.from_json(text)
    assert again.source == layout.source
    assert (again.width, again.height) == (layout.width, layout.height)
    assert again.skew_degrees == layout.skew_degrees
    assert np.array_equal(again.to_source, layout.to_source)
    assert dict(again.measures) == dict(layout.measures)
    assert again.flags == layout.flags
    for table, was in (
        (again.lines, layout.lines),
        (again.glyphs, layout.glyphs),
        (again.rules, layout.rules),
    ):
        assert list(table) == list(was)
        for name in was:
            assert table[name].shape == was[name].shape
            assert table[name].dtype.kind == was[name].dtype.kind
            assert np.array_equal(table[name], was[name])
    assert again.to_json() == text


def test_a_glyph_that_stands_in_no_line_has_null_for_it():
    layout = agreed()
    layout.glyphs["line"][0] = layout.glyphs["word"][0] = 0
    data = json.loads(layout.to_json())
    valid(data)
    assert data["glyphs"][0]["line"] is None
    assert data["glyphs"][0]["word"] is None
    assert Layout.from_json(layout.to_json()).glyphs["line"].tolist() == [0]


def test_names_of_any_bytes_come_back():
    layout = agreed()
    name = os.fsdecode(b"caf\xe9 \xc3\xa9.png")
    layout = Layout(**{**vars(layout), "source": replace(layout.source, file=name)})
    text = layout.to_json().encode("utf-8")
    assert b'"caf\\udce9 \xc3\xa9.png"' in text
    assert Layout.from_json(text).source.file == name


def test_numbers_are_rounded_to_fixed_places():
    layout = agreed()
    layout.lines["x_height_px"][0] = 21.00049
    layout.lines["baseline"][0, 0] = -0.0001, 0.1 + 0.2
    layout.to_source[0, 2] = 1 / 3
    data = json.loads(layout.to_json())
    assert data["lines"][0]["x_height_px"] == 21.0
    assert data["lines"][0]["baseline"][0] == [0.0, 0.3]
    assert "-0.0" not in layout.to_json()
    assert data["page"]["to_source"][0][2] == 0.333333333


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_numbers_that_are_none_are_refused(bad):
    layout = agreed()
    layout.rules["thickness_px"][0] = bad
    with pytest.raises(ValueError, match="finite"):
        layout.to_json()


def test_columns_of_unlike_length_are_refused():
    layout = agreed()
    layout.glyphs["area"] = np.array([1, 2])
    with pytest.raises(ValueError, match=r"shorter|longer"):
        layout.to_json()


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"", "not JSON"),
        (b"\xff\xfe\x00", "not JSON"),
        (b"[" * 100_000, "not JSON"),
        (b"[]", '"format" is not "scanclean-layout"'),
        (b'{"format": "scanclean-layout", "version": 9}', "version 9 of the format is not known"),
        (b'{"format": "scanclean-layout", "version": 1}', "'source' is missing"),
        (json.dumps({**AGREED, "glyphs": [{"id": 1}]}).encode(), "'line' is missing"),
        (json.dumps({**AGREED, "page": 3}).encode(), "wrong type"),
    ],
)
def test_what_is_no_layout_is_refused_in_a_line(tmp_path, data, says):
    path = tmp_path / "some.layout.json"
    path.write_bytes(data)
    with pytest.raises(PageError) as caught:
        read_layout(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: no layout of scanclean: ")
    assert says in message
    assert "\n" not in message


def test_a_file_is_read(tmp_path):
    path = tmp_path / "folio7.layout.json"
    path.write_text(agreed().to_json(), "utf-8")
    assert read_layout(path).to_json() == agreed().to_json()
    with pytest.raises(PageError, match="cannot be read: No such file"):
        read_layout(tmp_path / "none.layout.json")


def test_eight_thousand_glyphs_are_written_faster_than_json_writes_them_row_by_row():
    size = 8000
    rng = np.random.default_rng(7)
    layout = agreed()
    box = rng.integers(0, 3000, (size, 4))
    table = {name: rng.integers(1, 900, size) for name in ("line", "word")}
    table |= {"box": box} | {
        name: rng.integers(1, 900, size) for name in ("area", "parts", "holes")
    }
    layout = Layout(**{**vars(layout), "glyphs": table})
    rows = [
        dict(
            zip(
                ["id", *table], [i, *(column[i].tolist() for column in table.values())], strict=True
            )
        )
        for i in range(size)
    ]

    def best(action):
        times = []
        for _ in range(5):
            began = time.process_time()
            action()
            times.append(time.process_time() - began)
        return min(times)

    ours = best(layout.to_json)
    plain = best(lambda: [json.dumps(row) for row in rows])
    assert ours < 0.75 * plain, f"{ours * 1e3:.1f} ms against {plain * 1e3:.1f} ms"
