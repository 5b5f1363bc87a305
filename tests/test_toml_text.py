"""Saving keeps what the user wrote around the values."""

from __future__ import annotations

import copy
import math
import re
import tomllib
from collections import Counter
from collections.abc import Callable
from datetime import UTC, date, datetime, time
from random import Random
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.project.toml_text import FALLBACK, dump, render, same

DOCUMENT = """\
# Bench supply, revision B
# kept by the power group

format = 1   # of the file
shelf_files = ["shelf.toml"]

[project]
title = "Bench"   # shown on top

# the bus
[bus]
nominal = "28 V"
low = "24 V"        # measured
high = 0x1F

# ==== filters ====


# front filter

[[filter]]
id = "F1"
rated_current = "10 A"
dm = [
    # choke first
    { series = { L = "4.7 uH", R = "8 mohm" } },   # the choke
    { shunt = { C = "4.7 uF" } },                  # the capacitor
]

# radio
[[converter]]
id = "CV1"
# checked twice
rated_power = "20 W"
output = [{ name = "5V", voltage = "5 V", current = "2 A" }]
lead.R = "10 mohm"
lead.L = "200 nH"

# pump
[[converter]]
id = "CV2"   # on the left
rated_power = "60 W"

    # its outputs
    [[converter.output]]
    name = "12V"   # main
    voltage = "12 V"

    [[converter.output]]
    name = "3V3"

[converter.lead]  # short
R = "5 mohm"

# camera

[[converter]]
id = "CV3"
rated_power = 12.50
note = \"\"\"
two lines # no comment
  "quoted" \"\"\"   # long note

[[case]]
id = "night"
load = { CV1 = 0.6, CV2 = "off" }   # at night

[shelf.filter."F 10"]
rated_current = "5 A"   # of the shelf

# end of file
"""

Edits = Callable[[dict[str, Any]], object]


def comments(text: str) -> list[str]:
    return re.findall(r"# (?!no\b)[a-z0-9=, ]+", text)


def change(text: str, edit: Edits, origin: dict[str, tuple[int | None, ...]] | None = None) -> str:
    """The text after an edit; checks what holds for every ordinary edit."""
    mark = text[: text.startswith("\ufeff")]
    data = tomllib.loads(text.removeprefix(mark))
    edit(data)
    done = render(text, data, origin or {})
    assert FALLBACK not in done.notes
    assert done.text.startswith(mark)
    assert same(tomllib.loads(done.text.removeprefix(mark)), data)
    assert not Counter(comments(text)) - Counter(comments(done.text))
    # what was written can be changed again
    assert render(done.text, data, {}).text == done.text
    return done.text


def setter(*path: str | int, value: Any) -> Edits:
    def edit(data: Any) -> None:
        for step in path[:-1]:
            data = data[step]
        data[path[-1]] = value

    return edit


def remover(*path: str | int) -> Edits:
    def edit(data: Any) -> None:
        for step in path[:-1]:
            data = data[step]
        del data[path[-1]]

    return edit


def reorder(name: str, order: list[int]) -> Edits:
    def edit(data: Any) -> None:
        data[name] = [data[name][i] for i in order]

    return edit


def diff(old: str, new: str) -> tuple[list[str], list[str]]:
    """Lines of the old text that changed, and what they became, for texts of equally many lines."""
    a, b = old.splitlines(keepends=True), new.splitlines(keepends=True)
    assert len(a) == len(b)
    pairs = [(x, y) for x, y in zip(a, b, strict=True) if x != y]
    return [x for x, _ in pairs], [y for _, y in pairs]


STYLES = {
    "plain": DOCUMENT,
    "crlf": DOCUMENT.replace("\n", "\r\n"),
    "no last line end": DOCUMENT.rstrip("\n"),
    "crlf, no last line end": DOCUMENT.rstrip("\n").replace("\n", "\r\n"),
    "byte order mark": "\ufeff" + DOCUMENT,
    "no heading": DOCUMENT[DOCUMENT.index("format") :],
    "no blank lines": re.sub(r"\n\n+", "\n", DOCUMENT),
}


@pytest.mark.parametrize("text", STYLES.values(), ids=STYLES.keys())
class TestEveryStyle:
    def test_unchanged_data_gives_the_same_bytes(self, text: str) -> None:
        done = render(text, tomllib.loads(text.removeprefix("\ufeff")), {})
        assert done.text == text
        assert done.notes == ()

    @pytest.mark.parametrize(
        ("edit", "old", "new"),
        [
            (setter("format", value=2), "format = 1   # of the file", "format = 2   # of the file"),
            (setter("bus", "low", value="23 V"), 'low = "24 V"        # m', 'low = "23 V"        # m'),
            (setter("bus", "high", value=32.5), "high = 0x1F", "high = 32.5"),
            (
                setter("case", 0, "load", "CV1", value=0.7),
                'load = { CV1 = 0.6, CV2 = "off" }   # at night',
                'load = { CV1 = 0.7, CV2 = "off" }   # at night',
            ),
            (
                setter("case", 0, "load", value={"CV1": 0.6, "CV2": "off", "CV3": 0.1}),
                '{ CV1 = 0.6, CV2 = "off" }   #',
                '{ CV1 = 0.6, CV2 = "off", CV3 = 0.1 }   #',
            ),
            (setter("case", 0, "load", value={"CV2": "off"}), '{ CV1 = 0.6, CV2 = "off" }', '{ CV2 = "off" }'),
            (setter("case", 0, "load", value={"CV1": 0.6}), '{ CV1 = 0.6, CV2 = "off" }', "{ CV1 = 0.6 }"),
            (
                setter("filter", 0, "dm", 1, "shunt", "C", value="1 uF"),
                '{ C = "4.7 uF" } },   ',
                '{ C = "1 uF" } },   ',
            ),
            (setter("filter", 0, "dm", 0, "series", "Rp", value=9), 'R = "8 mohm" }', 'R = "8 mohm", Rp = 9 }'),
            (setter("shelf_files", value=["shelf.toml", "b"]), '["shelf.toml"]', '["shelf.toml", "b"]'),
            (setter("converter", 0, "lead", "L", value="1 nH"), 'lead.L = "200 nH"', 'lead.L = "1 nH"'),
            (setter("converter", 1, "output", 0, "voltage", value=9), '    voltage = "12 V"', "    voltage = 9"),
            (setter("converter", 1, "lead", "R", value=0), 'R = "5 mohm"', "R = 0"),
            (setter("shelf", "filter", "F 10", "rated_current", value=5), '"5 A"   # of', "5   # of"),
            (setter("converter", 2, "rated_power", value=12), "rated_power = 12.50", "rated_power = 12"),
        ],
    )
    def test_a_changed_value_changes_nothing_else(self, text: str, edit: Edits, old: str, new: str) -> None:
        assert old in text
        assert change(text, edit) == text.replace(old, new)

    def test_a_multi_line_string_is_replaced_with_its_comment_kept(self, text: str) -> None:
        done = change(text, setter("converter", 2, "note", value='one\n"line"'))
        assert 'note = "one\\n\\"line\\""   # long note' in done

    def test_new_keys_stand_at_the_end_of_their_block(self, text: str) -> None:
        done = change(text, setter("bus", "rating", value="30 A"))
        assert re.search(r'high = 0x1F\r?\nrating = "30 A"\r?\n', done)
        done = change(text, setter("author", value="me"))
        assert re.search(r'"shelf.toml"\]\r?\nauthor = "me"\r?\n', done)
        done = change(text, setter("converter", 0, "lead", "C", value=1))
        assert re.search(r'lead.L = "200 nH"\r?\nlead.C = 1\r?\n', done)
        done = change(text, setter("converter", 2, "lead", value={"R": 1, "L": "2 nH"}))
        assert re.search(r'# long note\r?\nlead = { R = 1, L = "2 nH" }\r?\n', done)
        done = change(text, setter("converter", 1, "output", 0, "current", value=1))
        assert re.search(r'    voltage = "12 V"\r?\n    current = 1\r?\n', done)

    def test_new_tables(self, text: str) -> None:
        done = change(text, setter("rules", value={"growth": "5 %"}))
        assert re.search(r'\r?\n\r?\n\[rules\]\r?\ngrowth = "5 %"\r?\n', done)
        done = change(text, setter("limit", value=[{"name": "own", "points": [[1, 2], [3, 4]]}]))
        assert re.search(
            r"\[\[limit\]\]\r?\nname = \"own\"\r?\npoints = \[\r?\n    \[1, 2\],\r?\n    \[3, 4\],\r?\n\]", done
        )
        done = change(text, setter("shelf", "filter", "Y", value={"isolation": 40}))
        assert re.search(r"# of the shelf\r?\n(# end of file\r?\n)?\r?\n\[shelf.filter.Y\]\r?\nisolation = 40", done)
        done = change(text, setter("shelf", "converter", value={"Z": {"phase": 0}}))
        assert re.search(r"\[shelf.converter.Z\]\r?\nphase = 0", done)

    def test_a_removed_key_leaves_its_comments(self, text: str) -> None:
        done = change(text, remover("converter", 0, "rated_power"))
        assert re.search(r"# kept from removed rated_power of converter CV1:\r?\n# checked twice(\r?\n)?\Z", done)

    def test_a_removed_row_leaves_its_comments(self, text: str) -> None:
        data = tomllib.loads(text.removeprefix("\ufeff"))
        data["converter"] = [data["converter"][0], data["converter"][2]]
        done = render(text, data, {"converter": (0, 2)})
        assert done.notes == ("The comments of removed converter CV2 were kept at the end of the file.",)
        lines = done.text.splitlines()
        at = lines.index("# kept from removed converter CV2:")
        assert lines[at - 1] == ""
        assert lines[at + 1 :] == ["# pump", "# on the left", "# its outputs", "# main", "# short"]
        assert "CV2" not in re.sub(r"#.*|load = .*", "", done.text)

    def test_moved_rows_take_their_comments_along(self, text: str) -> None:
        done = change(text, reorder("converter", [2, 0, 1]), {"converter": (2, 0, 1)})
        found = [line for line in done.splitlines() if line.startswith(("# camera", "# radio", "# pump", "id = "))]
        ids = ['id = "CV3"', 'id = "CV1"', 'id = "CV2"   # on the left']
        assert found == [
            *['id = "F1"', "# camera", ids[0], "# radio", ids[1], "# pump", ids[2], 'id = "night"'],
        ]
        assert sorted(done.splitlines()) == sorted(text.splitlines())
        assert change(done, reorder("converter", [1, 2, 0]), {"converter": (1, 2, 0)}) == text

    @pytest.mark.parametrize("at", [0, 1, 2, 3])
    def test_a_new_row_stands_in_its_place(self, text: str, at: int) -> None:
        order: list[int | None] = [0, 1, 2]
        order.insert(at, None)

        def edit(data: dict[str, Any]) -> None:
            data["converter"].insert(at, {"id": "NEW", "output": [{"name": "a"}, {"name": "b"}]})

        done = change(text, edit, {"converter": tuple(order)})
        row = '[[converter]]\nid = "NEW"\noutput = [\n    { name = "a" },\n    { name = "b" },\n]\n'
        assert row in done.replace("\r\n", "\n")
        # nothing else moved
        rest = [line for line in done.replace("\r\n", "\n").replace(row, "").splitlines() if line]
        assert rest == [line for line in text.splitlines() if line]

    def test_all_rows_removed_and_one_added_again(self, text: str) -> None:
        gone = change(text, setter("converter", value=[]), {"converter": ()})
        back = change(gone, setter("converter", value=[{"id": "X"}]), {"converter": (None,)})
        assert re.search(r'\[\[converter\]\]\r?\nid = "X"', back)

    def test_all_rows_replaced(self, text: str) -> None:
        change(text, setter("converter", value=[{"id": "X"}, {"id": "Y"}]), {"converter": (None, None)})

    def test_line_ends_stay_uniform(self, text: str) -> None:
        done = change(text, setter("limit", value=[{"name": "own", "points": [[1, 2], [3, 4]]}]))
        done = change(done, reorder("converter", [1]), {"converter": (1,)})
        done = change(done, setter("bus", "rating", value=3))
        assert ("\r\n" in done) == ("\r\n" in text)
        if "\r\n" in text:
            assert "\n" not in done.replace("\r\n", "")
        assert done.endswith("\n") == text.endswith("\n")


def test_a_second_removal_appends_to_the_kept_comments() -> None:
    once = change(DOCUMENT, reorder("converter", [1, 2]), {"converter": (1, 2)})
    twice = change(once, reorder("converter", [0]), {"converter": (0,)})
    assert twice.endswith(
        "# end of file\n\n# kept from removed converter CV1:\n# radio\n# checked twice\n\n"
        "# kept from removed converter CV3:\n# camera\n# long note\n"
    )


def test_a_section_heading_stays_when_the_row_below_it_goes() -> None:
    done = change(DOCUMENT, remover("filter"))
    assert "low = " in done.split("# ==== filters ====")[0]
    assert done.index("# ==== filters ====") < done.index("# radio") < done.index("# front filter")


def test_a_duplicated_row_is_written_as_a_new_one() -> None:
    def edit(data: dict[str, Any]) -> None:
        data["converter"].insert(1, {**data["converter"][0], "id": "CV1b"})

    done = change(DOCUMENT, edit, {"converter": (0, 0, 1, 2)})
    assert done.count("# radio") == 1
    assert done.index("# radio") < done.index('"CV1b"') < done.index("# pump")


def test_rows_match_by_position_without_an_origin() -> None:
    done = change(DOCUMENT, setter("converter", 1, "id", value="P1"))
    assert done == DOCUMENT.replace('"CV2"   #', '"P1"   #')
    change(DOCUMENT, reorder("converter", [2, 0]))
    change(DOCUMENT, setter("case", value=[{"id": "a"}, {"id": "b"}, {"id": "c"}]))


def test_an_origin_out_of_range_is_a_new_row() -> None:
    change(DOCUMENT, reorder("converter", [0, 1]), {"converter": (7, -1)})


ARRAY = """\
[[filter]]
id = "F1"
dm = [   # from the bus
    # first choke
    { series = { L = 1 } },   # wound here
    # first capacitor
    { shunt = { C = 1 } }     # film

    # damping
    , { shunt = { C = 2, R = 3 } },
    { shunt = { C = 4 } }     # last
]   # end of ladder
cm = [{ series = { L = 5 } }, { shunt = { C = 6 } }]
points = [[1, 2], [3, 4],
          [5, 6]]
"""


@pytest.mark.parametrize("line_end", ["\n", "\r\n"])
class TestArrays:
    def items(self, line_end: str, edit: Callable[[list[Any]], object], key: str = "dm") -> str:
        text = ARRAY.replace("\n", line_end)
        done = change(text, lambda data: edit(data["filter"][0][key]))
        assert line_end == "\n" or "\n" not in done.replace("\r\n", "")
        return done.replace("\r\n", "\n")

    def test_items_are_removed_by_line(self, line_end: str) -> None:
        done = self.items(line_end, lambda dm: dm.pop(0))
        assert done == ARRAY.replace("    # first choke\n    { series = { L = 1 } },   # wound here\n", "").replace(
            "dm =", "# first choke\n# wound here\ndm ="
        )

    @pytest.mark.parametrize("at", [1, 2, 3])
    def test_any_item_can_be_removed(self, line_end: str, at: int) -> None:
        done = self.items(line_end, lambda dm: dm.pop(at))
        assert done.count("{ s") == ARRAY.count("{ s") - 1
        assert "    { series = { L = 1 } },   # wound here\n" in done

    @pytest.mark.parametrize("at", [0, 1, 2, 3, 4])
    def test_an_item_can_be_put_anywhere(self, line_end: str, at: int) -> None:
        done = self.items(line_end, lambda dm: dm.insert(at, {"shunt": {"C": 9}}))
        places = [done.index(item) for item in ("L = 1", "C = 1", "C = 2", "C = 4")]
        assert sorted([*places, done.index("C = 9")]).index(done.index("C = 9")) == at

    def test_items_on_one_line(self, line_end: str) -> None:
        done = self.items(line_end, lambda cm: cm.insert(1, {"shunt": {"C": 7}}), "cm")
        assert "cm = [{ series = { L = 5 } }, { shunt = { C = 7 } }, { shunt = { C = 6 } }]" in done
        assert "cm = [{ shunt = { C = 6 } }]" in self.items(line_end, lambda cm: cm.pop(0), "cm")
        assert "cm = [{ series = { L = 5 } }]" in self.items(line_end, lambda cm: cm.pop(1), "cm")
        assert "          [5, 6], [7, 8]]" in self.items(line_end, lambda points: points.append([7, 8]), "points")
        assert "points = [[1, 2], [3, 7],\n" in self.items(
            line_end, lambda points: points[1].__setitem__(1, 7), "points"
        )

    def test_an_emptied_array_keeps_its_comments_above(self, line_end: str) -> None:
        done = self.items(line_end, lambda dm: dm.clear())
        head = "# from the bus\n# first choke\n# wound here\n# first capacitor\n# film\n# damping\n# last\n"
        assert f'id = "F1"\n{head}dm = []   # end of ladder\n' in done


HARD = {
    "inline array of rows": 'filter = [ # all of them\n  { id = "A" }, # front\n  { id = "B", dm = [] },\n]\n[bus]\n',
    "empty rows": "filter = [] # none yet\n",
    "dotted keys": "bus.low = 1 # a\nbus.\"high\" = 2 # b\nproject . 'title' = 'x'\nshelf.filter.X.note = ''\n",
    "inline tables": "bus = { low = 1, lead = { R = 1 }, wires.R = 2, wires.L = 3 } # c\nshelf = {}\n",
    "rows apart": (
        "[[converter]] # a\nid = 'A'\n\n[[converter]]\nid = 'B' # b\n\n[bus] # the bus\nlow = 1\n\n"
        "# b lead\n[converter.lead]\nR = 1\n\n# tail\n\n"
        "[[converter.output]]\nname = 'x'\n[converter.lead.more]\nk = 1\n"
    ),
    "implicit tables": "[shelf.filter.X] # x\nnote = 'a'\n[shelf.filter.Y]\n[shelf.converter.Z.lead]\nR = 1 # r\n",
    "table after its part": "[shelf.filter.X]\nnote = 'a' # x\n[bus]\nlow = 1\n[shelf]\nnote = 'late' # late\n",
    "strings": (
        '[project]\ntitle = \'\'\'a # no\n\'b\'\'\'\'\'\nnote = """x \\""" # no\n\\\n  y"""""\n'
        'revision = "\\u0041#" # yes\n'
    ),
    "numbers": "[bus]\na = 1_000\nb = 0xFF\nc = 1e-9\nd = inf\ne = nan\nf = +1.0\ng = true\nh = -0.0\n",
    "times": "a = 1979-05-27 07:32:00 # d\nb = 1979-05-27T07:32:00.5-07:00\nc = 1979-05-27\nd = 07:32:00\n",
    "odd keys": '"" = 1\n\'a.b\' = 2 # q\n"tab\\t" = 3\n1.5 = 4\n["x y".\'z\']\n"\\u00e9" = 1\n',
    "spaces": "  [ bus ]\t# tab\n\tlow\t=\t1\t# low\n  high=2\n\n\n[[ filter ]]\n  id = 'A'\n",
    "comments only": "# one\n\n# two\n",
    "heading touches the first row": "# of a\n[[filter]]\nid = 'A'\n[[filter]] # of b\nid = 'B'",
    "nested arrays": "[bus]\nm = [ [ 1, 2, # one\n ], # two\n [ ], [3] # three\n]\n",
    "commas on their own": "m = [\n 1 # one\n , # two\n 2\n ,\n]\nn = [\n  1\n, 2\n, 3 # three\n]\n",
    "arrays of arrays of tables": "[[a]]\n[[a.b]] # b\nk = 1\n[[a.b]]\n[[a.b.c]] # c\n[a.b.d]\n[[a]]\n[[a.b]]\nk = 3\n",
    "blank": "\n\n",
    "empty": "",
}


def spots(data: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Paths of all values in a document."""
    found = [path] if path else []
    steps = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for step, value in steps:
        found += spots(value, (*path, step))
    return found


NEW_VALUES: list[Any] = [
    7.5,
    'a "b" # c\n',
    [],
    {},
    [1, [2]],
    [{"a": 1}, {"b": {"c": []}}],
    {"k": {"l": {"m": date(2020, 2, 3)}}},
]


@pytest.mark.parametrize("style", HARD)
def test_every_value_of_a_hard_style_can_be_changed_and_removed(style: str) -> None:
    text = HARD[style].replace("\n", "\r\n" if len(style) % 2 else "\n")
    assert change(text, lambda data: None) == text
    for path in spots(tomllib.loads(text)):
        change(text, remover(*path))
        for value in NEW_VALUES:
            change(text, setter(*path, value=value))
    for path in [(), *spots(tomllib.loads(text))]:
        for value in NEW_VALUES:

            def add(data: Any, path: tuple[Any, ...] = path, value: Any = value) -> None:
                for step in path:
                    data = data[step]
                if isinstance(data, dict):
                    data["new key"] = value
                elif isinstance(data, list):
                    data.insert(0, value)
                    data.append(value)

            change(text, add)
    for name, rows in tomllib.loads(text).items():
        if isinstance(rows, list) and rows:
            order = tuple(reversed(range(len(rows))))
            change(text, reorder(name, list(order)), {name: order})
            more = [*rows[:1], {"id": "N"}, *rows[1:]]
            change(text, setter(name, value=more), {name: (0, None, *range(1, len(rows)))})


def test_all_of_a_hard_style_can_go() -> None:
    for text in HARD.values():
        change(text, lambda data: data.clear())


def test_rows_apart_from_their_parts_are_brought_together() -> None:
    done = change(HARD["rows apart"], reorder("converter", [1, 0]), {"converter": (1, 0)})
    assert done.index("# b lead") < done.index("lead.more") < done.index("'A'") < done.index("[bus]")


def test_what_cannot_be_placed_is_written_anew_with_all_comments(monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise LookupError

    monkeypatch.setattr("budget.project.toml_text._Surgery", broken)
    data = tomllib.loads(DOCUMENT)
    data["bus"]["low"] = 1
    done = render("\ufeff" + DOCUMENT.replace("\n", "\r\n"), data, {})
    assert done.notes == (FALLBACK,)
    assert done.text.startswith("\ufeff")
    assert "\n" not in done.text.replace("\r\n", "")
    assert same(tomllib.loads(done.text[1:]), data)
    assert not Counter(comments(DOCUMENT)) - Counter(comments(done.text))


def test_same() -> None:
    now = datetime(2020, 1, 1, tzinfo=UTC)
    assert same({"a": [1, {"b": math.nan}], "c": now}, {"c": now, "a": [1, {"b": math.nan}]})
    different = [
        1,
        1.0,
        True,
        "1",
        [1],
        {"a": 1},
        {"b": 1},
        [],
        {},
        -0.0,
        0.0,
        0,
        False,
        now,
        now.date(),
        time(1),
        None,
    ]
    for i, a in enumerate(different):
        for j, b in enumerate(different):
            assert same(a, b) == (i == j and a is not None), (a, b)


def test_dump_has_a_shape_that_does_not_depend_on_length() -> None:
    for note in ("x", "x" * 300):
        data = {
            "format": 1,
            "bus": {"low": "24 V", "lead": {"R": 1}, "none": {}},
            "filter": [{"id": "F", "note": note, "dm": [{"series": {"L": note}}], "points": [[1, 2]]}, {}],
            "case": [],
            "shelf": {"note": "n", "filter": {"a b": {"lead": {"R": 1}}, "E": {}}, "converter": {}},
        }
        assert dump(data) == (
            'format = 1\ncase = []\n\n[bus]\nlow = "24 V"\nlead = { R = 1 }\nnone = {}\n\n[[filter]]\nid = "F"\n'
            f'note = "{note}"\ndm = [\n    {{ series = {{ L = "{note}" }} }},\n]\npoints = [\n    [1, 2],\n]\n\n'
            '[[filter]]\n\n[shelf]\nnote = "n"\nconverter = {}\n\n[shelf.filter."a b"]\nlead = { R = 1 }\n\n'
            "[shelf.filter.E]\n"
        )
        assert same(tomllib.loads(dump(data)), data)


# -- random documents


scalars = st.one_of(
    st.integers(-(2**63), 2**63 - 1),
    st.floats(),
    st.booleans(),
    st.text(st.characters(exclude_categories=["Cs"]), max_size=6),
    st.sampled_from(["4.7 uH", "28 V", "off", "85 %", "# no comment", "\r\n", '"""', "'''"]),
    st.dates(),
    st.times(),
    st.datetimes(timezones=st.sampled_from([None, UTC])),
)
keys = st.one_of(
    st.sampled_from(["id", "name", "note", "lead", "dm", "cm", "output", "load", "rated_power", "R", "L", "points"]),
    st.text(st.characters(exclude_categories=["Cs"]), max_size=3),
)
values = st.recursive(
    scalars, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(keys, inner, max_size=3), max_leaves=6
)
tables = st.dictionaries(keys, values, max_size=4)
documents = st.fixed_dictionaries(
    {},
    optional={
        "format": st.just(1),
        "shelf_files": st.lists(st.text("ab/.", max_size=5), max_size=2),
        "bus": tables,
        "shelf": st.fixed_dictionaries({}, optional={"filter": st.dictionaries(keys, tables, max_size=2)}),
        "filter": st.lists(tables, max_size=3),
        "converter": st.lists(tables, max_size=4),
        "case": st.lists(tables, max_size=2),
        "other": values,
    },
)


@given(documents)
@settings(max_examples=40, deadline=None)
def test_dump_reads_back(data: dict[str, Any]) -> None:
    assert same(tomllib.loads(dump(data)), data)


class Writer:
    """Writes data as TOML in styles drawn at random, with a numbered comment wherever one may stand."""

    def __init__(self, seed: int) -> None:
        self.random = Random(seed)
        self.count = 0

    def chance(self, share: float) -> bool:
        return bool(self.random.random() < share)

    def comment(self, share: float = 0.3) -> str:
        if not self.chance(share):
            return ""
        self.count += 1
        return f"# unique-comment-{self.count:03d}"

    def lines_above(self, indent: str = "") -> str:
        out = ""
        while comment := self.comment():
            out += f"{indent}{comment}\n" + "\n" * self.chance(0.2)
        return out

    def key(self, name: str) -> str:
        return dump({name: 0})[:-5]

    def scalar(self, value: Any) -> str:
        if isinstance(value, str) and self.chance(0.4):
            plain = value.isprintable()
            if plain and "'" not in value:
                return self.random.choice([f"'{value}'", f"'''{value}'''", f"'''\n{value}'''"])
            if plain and "\\" not in value and '"' not in value:
                return f'"""\n{value}\\\n   """'
        return dump({"k": value})[4:-1]

    def value(self, value: Any) -> str:
        if isinstance(value, dict):
            if len(value) and self.chance(0.3):
                return "{" + ",".join(f"{self.dotted(key, item)}" for key, item in value.items()) + "}"
            return "{ " + ", ".join(f"{self.key(key)} = {self.value(item)}" for key, item in value.items()) + " }"
        if not isinstance(value, list):
            return self.scalar(value)
        if self.chance(0.4):
            return "[" + ", ".join(map(self.value, value)) + ", " * (bool(value) and self.chance(0.3)) + "]"
        out = "["
        for i, item in enumerate(value):
            comma = "," if i + 1 < len(value) or self.chance(0.6) else ""
            if self.chance(0.8):
                out += f" {self.comment()}\n{self.lines_above('  ')}  "
            out += self.value(item) + (f" {self.comment()}\n{comma}" if self.chance(0.1) else comma)
        return out + f"  {self.comment()}\n" * self.chance(0.8) + self.lines_above("  ") + "]"

    def dotted(self, key: str, value: Any) -> str:
        name = self.key(key)
        while isinstance(value, dict) and len(value) == 1 and self.chance(0.7):
            (key, value), *_ = value.items()
            name += " . " * self.chance(0.2) + "." * (not name.endswith(" . ")) + self.key(key)
        return f"{name} = {self.value(value)}".replace(" . .", " .")

    def entry(self, key: str, value: Any) -> str:
        if isinstance(value, dict) and len(value) > 1 and self.chance(0.3):
            return "".join(self.line(f"{self.key(key)}.{self.key(k)} = {self.value(v)}") for k, v in value.items())
        return self.line(f"{self.key(key)} = {self.value(value)}")

    def line(self, text: str) -> str:
        indent = " " * self.random.choice([0, 0, 2])
        return f"{self.lines_above(indent)}{indent}{text} {self.comment()}\n" + "\n" * self.chance(0.1)

    def block(self, path: list[str], value: Any) -> str:
        name = ".".join(map(self.key, path))
        if isinstance(value, list):
            return "".join(self.body(path, row, f"[[{name}]]") for row in value)
        return self.body(path, value, f"[{name}]")

    def body(self, path: list[str], value: dict[str, Any], header: str) -> str:
        inner = {key: item for key, item in value.items() if self.is_block(item) and self.chance(0.6)}
        own = {key: item for key, item in value.items() if key not in inner}
        out = "\n" * self.random.choice([0, 1, 1, 2])
        if own or not inner or header.startswith("[[") or self.chance(0.5):
            out += self.lines_above() + f"{header} {self.comment()}\n"
        out += "".join(self.entry(key, item) for key, item in own.items())
        return out + "".join(self.block([*path, key], item) for key, item in inner.items())

    def is_block(self, value: Any) -> bool:
        return isinstance(value, dict) or (
            isinstance(value, list) and bool(value) and all(isinstance(item, dict) for item in value)
        )

    def document(self, data: dict[str, Any]) -> str:
        blocks = {key: item for key, item in data.items() if self.is_block(item) and self.chance(0.85)}
        out = self.lines_above()
        out += "".join(self.entry(key, item) for key, item in data.items() if key not in blocks)
        out += "".join(self.block([key], item) for key, item in blocks.items()) + self.lines_above()
        out = out.removesuffix("\n") if self.chance(0.2) else out
        return out.replace("\n", "\r\n") if self.chance(0.3) else out


@st.composite
def texts(draw: Callable[[st.SearchStrategy[Any]], Any]) -> str:
    return Writer(draw(st.integers(0, 2**32))).document(draw(documents))


def marks(text: str) -> list[str]:
    return re.findall(r"# unique-comment-\d\d\d", text)


@given(texts())
@settings(max_examples=40, deadline=None)
def test_any_text_survives_unchanged_data(text: str) -> None:
    done = render(text, tomllib.loads(text), {})
    assert done.text == text
    assert done.notes == ()


ROWS = ("filter", "converter", "case", "limit")


def edit_at_random(data: dict[str, Any], draw: Callable[[st.SearchStrategy[Any]], Any]) -> dict[str, tuple[Any, ...]]:
    """Some edits such as a user makes; returns where the rows came from."""
    origin: dict[str, list[int | None]] = {
        name: list(range(len(data[name]))) for name in ROWS if isinstance(data.get(name), list)
    }
    lists: dict[str, list[Any]] = {name: data[name] for name in origin}
    for _ in range(draw(st.integers(1, 4))):
        kind = draw(st.sampled_from(["row", "row", "set", "set", "add", "remove"]))
        if kind == "row":
            name = draw(st.sampled_from(ROWS))
            rows, source = lists.setdefault(name, []), origin.setdefault(name, [])
            data[name] = rows
            at = draw(st.integers(0, len(rows)))
            act = draw(st.sampled_from(["new", "move", "remove", "copy", "rename"]))
            if act == "new" or not rows:
                rows.insert(at, draw(tables))
                source.insert(at, None)
                continue
            i = draw(st.integers(0, len(rows) - 1))
            if act == "copy":
                rows.insert(at, copy.deepcopy(rows[i]))
                source.insert(at, None)
            elif act == "rename":
                rows[i]["id"] = draw(scalars)
            else:
                row, where = rows.pop(i), source.pop(i)
                if act == "move":
                    rows.insert(min(at, len(rows)), row)
                    source.insert(min(at, len(rows)), where)
            continue
        free = [path for path in spots(data) if len(path) != 1 and not (len(path) == 2 and path[0] in ROWS)]
        if kind == "add":
            free = [path for path in [(), *spots(data)] if len(path) != 1 or path[0] not in ROWS]
        if not free:
            continue
        target: Any = data
        path = draw(st.sampled_from(free))
        for step in path[:-1] if kind != "add" else path:
            target = target[step]
        if kind == "set":
            target[path[-1]] = draw(values)
        elif kind == "remove":
            del target[path[-1]]
        elif isinstance(target, list):
            target.insert(draw(st.integers(0, len(target))), draw(values))
        elif isinstance(target, dict):
            name = draw(keys)
            if path or name not in ROWS:
                target[name] = draw(values)
    return {name: tuple(source) for name, source in origin.items()}


@given(texts(), st.data())
@settings(max_examples=100, deadline=None)
def test_random_edits_read_back_and_lose_no_comment(text: str, source: st.DataObject) -> None:
    data = tomllib.loads(text)
    origin = edit_at_random(data, source.draw)
    done = render(text, data, origin)
    assert same(tomllib.loads(done.text), data)
    assert sorted(marks(done.text)) == sorted(marks(text))
    assert FALLBACK not in done.notes
    assert not [note for note in done.notes if "before the change" in note]


@given(texts(), st.data())
@settings(max_examples=50, deadline=None)
def test_one_changed_scalar_changes_its_lines_only(text: str, source: st.DataObject) -> None:
    data = tomllib.loads(text)

    def at(path: tuple[Any, ...]) -> Any:
        value: Any = data
        for step in path:
            value = value[step]
        return value

    free = [
        path
        for path in spots(data)
        if not isinstance(at(path), dict | list) and not (isinstance(at(path), str) and not at(path).isprintable())
    ]
    if not free:
        return
    path = source.draw(st.sampled_from(free))
    setter(*path, value="changed")(data)
    done = render(text, data, {})
    assert not done.notes
    old, new = text.splitlines(keepends=True), done.text.splitlines(keepends=True)
    head = 0
    while head < min(len(old), len(new)) and old[head] == new[head]:
        head += 1
    tail = 0
    while tail < min(len(old), len(new)) - head and old[-1 - tail] == new[-1 - tail]:
        tail += 1
    assert len(new) - tail - head <= 1  # the value's own line, and
    assert len(old) - tail - head <= 3  # the two more of a multi-line string
    assert marks(done.text) == marks(text)


@given(st.permutations(range(4)), st.randoms(use_true_random=False))
@settings(max_examples=40, deadline=None)
def test_moved_rows_keep_their_comments(order: list[int], random: Any) -> None:
    rows: list[str] = []
    for i in range(4):
        above = random.choice(["# above-{0}\n", "# more-{0}\n# above-{0}\n", "# above-{0}\n\n"])
        inner = random.choice(["", "\n# part-{0}\n[converter.lead] # of-{0}\nR = {0}\n", "# under-{0}\n"])
        rows.append((above + "[[converter]] # head-{0}\n# key-{0}\nid = 'CV{0}' # tail-{0}\n" + inner).format(i))
    text = "[bus]\nlow = 1\n\n" + "\n".join(rows) + random.choice(["", "\n[[case]]\n", "\n\n# end\n"])
    data = tomllib.loads(text)
    reorder("converter", order)(data)
    done = render(text, data, {"converter": tuple(order)})
    assert not done.notes
    assert same(tomllib.loads(done.text), data)
    numbers = [int(found) for found in re.findall(r"# [a-z]+-(\d)", done.text)]
    groups = [n for n, before in zip(numbers, [None, *numbers], strict=False) if n != before]
    assert groups == order
    assert sorted(done.text.splitlines()) == sorted(text.splitlines())
