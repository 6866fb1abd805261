"""The line of every key and table of a TOML text, which faults are told with."""

import tempfile
from pathlib import Path

from hypothesis import given
from unit.legal import presets

from liveres import save_preset
from liveres.toml_lines import line_of, value_lines


def test_lines_are_found_in_every_spelling_toml_has():
    """Strings that look like tables, lists over lines, dotted and quoted keys, comments with brackets."""
    lines = value_lines('''# [[filters]]
title = """
[[filters]] # "" not one
q = 1"""""
notes = 'a # b' # [c]
a."b c".d = { e = [1, { f = 2 }], g = "]" }
list = [
  1.5, # one
  [2,
   3],
]
[[filters]]
q = 1
[[ filters ]]
q = 2
[filters.sub]
x = 1979-05-27 07:32:00
[[filters.deep]]
y = \'\'\'it\'s
\'\'\'
z = ""
''')
    assert {place: line for place, line in lines.items() if len(place) != 1 or place[0] != "filters"} == {
        ("title",): 2, ("notes",): 5, ("a",): 6, ("a", "b c"): 6, ("a", "b c", "d"): 6, ("a", "b c", "d", "e"): 6,
        ("a", "b c", "d", "e", 1): 6, ("a", "b c", "d", "e", 2): 6, ("a", "b c", "d", "e", 2, "f"): 6, ("a", "b c", "d", "g"): 6,
        ("list",): 7, ("list", 1): 8, ("list", 2): 9, ("list", 2, 1): 9, ("list", 2, 2): 10,
        ("filters", 1): 12, ("filters", 1, "q"): 13, ("filters", 2): 14, ("filters", 2, "q"): 15,
        ("filters", 2, "sub"): 16, ("filters", 2, "sub", "x"): 17,
        ("filters", 2, "deep"): 18, ("filters", 2, "deep", 1): 18,
        ("filters", 2, "deep", 1, "y"): 19, ("filters", 2, "deep", 1, "z"): 21,
    }  # fmt: skip
    assert line_of(lines, ("filters", 2, "missing")) == 14
    assert line_of(lines, ("nowhere",)) is None


@given(preset=presets())
def test_lines_point_at_their_keys_in_any_saved_preset(preset):
    """The text of a line begins with the key that the line is given for."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "p.toml"
        save_preset(preset, path)
        text = path.read_bytes().decode()
    lines = text.split("\n")
    found = value_lines(text)
    assert len([place for place in found if len(place) == 3]) >= 5 * len(preset.filters)
    for place, line in found.items():
        if place == ("filters",) or isinstance(place[-1], int):
            assert lines[line - 1].startswith(("[[filters]]", "channels"))
        else:
            assert lines[line - 1].startswith(f"{place[-1]} = ")
