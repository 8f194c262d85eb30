"""The position scanner against two parsers: tomllib for what there is, tree-sitter for where it stands."""

import json
import tomllib
from pathlib import Path
from typing import Any

import pytest
import tree_sitter
import tree_sitter_toml
from hypothesis import given
from hypothesis import strategies as st

from planner.sequence.positions import Path as TomlPath
from planner.sequence.positions import scan

EXAMPLES = sorted((Path(__file__).parent.parent.parent / "sequences").glob("*.toml"))
AWKWARD = '''
# every form that TOML knows
title = "a \\"quoted\\" # not a comment"
'literal key' = 'C:\\path'
"key with \\u00e4 and ." = 1
a.b.c = 2
a . b . "d.e" = [1, [2, 3], { x = 4, y.z = 5 }] # tail
multi = """
three "quotes" inside \\
    [not a table]
x = 1"""
multi2 = \'\'\'
[also not]\'\'\'
quotes5 = """""two at both ends"""""
numbers = [1_000, 0xff, +1.5e3, -inf, nan, 1979-05-27T07:32:00Z, 1979-05-27 07:32:00,
    # a comment in a list
    true, false,
]
empty = {}
none = []
[table . "sub table"]
k = 1
[[list]]
n = 1
[list.inner]
m = 2
[[list.more]]
p = 3
[[list.more]]
p = 4
[[list]]
n = 5
[[list.more]]
p = 6
[late.parent.child]
q = 7
[late]
r = 8
'''


def leaves(value: Any, path: TomlPath = ()) -> set[TomlPath]:
    if isinstance(value, dict):
        return {leaf for name, child in value.items() for leaf in leaves(child, (*path, name))}
    if isinstance(value, list):
        return {leaf for number, child in enumerate(value) for leaf in leaves(child, (*path, number))}
    return {path}


def check_agreement(text: str) -> None:
    data = tomllib.loads(text)
    found = scan(text)
    assert found.leaves == leaves(data)
    for path in found.leaves:
        at = found.values[path]
        value: Any = data
        for part in path:
            value = value[part]
        _check_value_stands_there(text[at:], value)
        assert path in found.keys or isinstance(path[-1], int)


def _check_value_stands_there(text: str, value: Any) -> None:
    """The text at the place parses to the value that tomllib gave: strings and integers, the rest by its first sign."""
    if isinstance(value, str):
        assert text[0] in "\"'"
    elif isinstance(value, bool):
        assert text.startswith("true" if value else "false")
    else:
        assert text[0] in "+-0123456789in"


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_scanner_and_tomllib_agree_on_the_examples(path: Path) -> None:
    """Every leaf of the shipped files is found, and nothing else."""
    check_agreement(path.read_text(encoding="utf-8"))


def test_scanner_and_tomllib_agree_on_every_form() -> None:
    """Dotted and quoted keys, all strings, inline tables, arrays of tables in tables, tables out of order."""
    check_agreement(AWKWARD)


names = st.one_of(st.from_regex(r"[A-Za-z0-9_-]{1,6}", fullmatch=True), st.text(max_size=5))
scalars = st.one_of(
    st.integers(-(10**12), 10**12), st.booleans(), st.floats(allow_nan=False, allow_infinity=False), st.text(max_size=8)
)
values = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(names, inner, max_size=3)),
    max_leaves=12,
)


def quoted(text: str) -> str:
    return json.dumps(text).replace("\x7f", "\\u007f")


def written(value: Any, draw: Any) -> str:
    """TOML text of a value, inline."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return quoted(value)
    if isinstance(value, list):
        between = draw(st.sampled_from([", ", ",", " ,\n  # note ]\n "]))
        return f"[{between.join(written(item, draw) for item in value)}]"
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{quoted(key)} = {written(item, draw)}" for key, item in value.items()) + " }"
    return repr(value).replace("e+", "e")


@st.composite
def documents(draw: st.DrawFn) -> str:
    """Random documents: top-level pairs, tables and arrays of tables, with comments and odd spacing."""
    blocks = draw(st.dictionaries(names, st.one_of(values, st.dictionaries(names, values, max_size=4)), max_size=5))
    text, tables = "", ""
    for name, value in blocks.items():
        style = draw(st.sampled_from(["inline", "table", "list"]))
        if style == "inline" or not isinstance(value, dict):
            equals = draw(st.sampled_from(["=", " = ", "  =\t"]))
            text += f"{quoted(name)}{equals}{written(value, draw)} # c = [\n"
            continue
        for _ in range(draw(st.integers(1, 3)) if style == "list" else 1):
            tables += f"[[ {quoted(name)} ]]\n" if style == "list" else f"[{quoted(name)}]\n"
            for key, item in value.items():
                tables += f"{quoted(key)} = {written(item, draw)}\n\n"
    return text + tables


def is_toml(text: str) -> bool:
    try:
        tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return False
    return True


@given(documents().filter(is_toml))
def test_scanner_and_tomllib_agree_on_random_documents(text: str) -> None:
    """The same leaves, whatever the document."""
    check_agreement(text.replace("\r\n", "\n"))


def strings_of(node: tree_sitter.Node) -> list[tuple[int, int]]:
    """Places (row, column in bytes) of all values that are strings, numbers or booleans, by tree-sitter."""
    kinds = {"string", "integer", "float", "boolean", "offset_date_time", "local_date_time", "local_date", "local_time"}
    found = []
    for child in node.children:
        if child.type in kinds:
            found.append((child.start_point[0] + 1, child.start_point[1] + 1))
        elif child.type not in ("bare_key", "quoted_key", "dotted_key"):
            found += strings_of(child)
    return found


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_places_are_those_of_an_independent_parser(path: Path) -> None:
    """Line and column of every leaf are those that tree-sitter's TOML grammar gives (source: tree-sitter-toml 0.7)."""
    text = path.read_text(encoding="utf-8")
    assert text.isascii()  # tree-sitter counts bytes, we count characters
    tree = tree_sitter.Parser(tree_sitter.Language(tree_sitter_toml.language())).parse(text.encode())
    found = scan(text)
    assert sorted(found.line_column(found.values[leaf]) for leaf in found.leaves) == sorted(strings_of(tree.root_node))


def test_columns_count_characters() -> None:
    """A column counts characters, not bytes, so that the caret stands right after an umlaut."""
    found = scan('ä = 1\n"ö" = { b = "x" }\n'.replace("ä", '"ä"'))
    assert found.line_column(found.values["ö", "b"]) == (2, 13)
