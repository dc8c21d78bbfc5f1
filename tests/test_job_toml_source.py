"""The line of every key of a TOML document."""

import copy
import pickle
import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fathomline.errors import JobError
from fathomline.job.toml_source import TomlSource, locate_keys, parse_toml

EXAMPLE = '''\
# [comment] key = 1
schema = 1 # trailing = comment
"quoted key" = """
fake = 1
[fake]
"""
literal = \'\'\'
[[fake]] \\\'\'\'

[absorber]
name = "a # no comment [x] \\" = "
sky.ra = 1.0
sky . "dec" = 2.0

[[region]]   # one
window = [
  -150.0, # lower ]
  220.0,
]
[[region]]
window = [-1, 1]
exclude = [[-31.0, -22.5],
           [1, 2]]
[region.extra.deep]
key = 1

[[component]]
logN = { "Fe II" = 12.9, "Mg II" = { value = 13.2, fixed = true }, 'O\\' = 1 }
when = 1979-05-27 07:32:00
[[region]]
[[region.part]]
[[region.part]]
end = "last"'''

# Counted by hand in the text above.
LINES = {
    ("schema",): 2,
    ("quoted key",): 3,
    ("literal",): 7,
    ("absorber",): 10,
    ("absorber", "name"): 11,
    ("absorber", "sky"): 12,
    ("absorber", "sky", "ra"): 12,
    ("absorber", "sky", "dec"): 13,
    ("region",): 15,
    ("region", 0): 15,
    ("region", 0, "window"): 16,
    ("region", 0, "window", 0): 17,
    ("region", 0, "window", 1): 18,
    ("region", 1): 20,
    ("region", 1, "window"): 21,
    ("region", 1, "exclude"): 22,
    ("region", 1, "exclude", 1): 23,
    ("region", 1, "exclude", 1, 0): 23,
    ("region", 1, "extra"): 24,
    ("region", 1, "extra", "deep"): 24,
    ("region", 1, "extra", "deep", "key"): 25,
    ("component", 0): 27,
    ("component", 0, "logN", "Fe II"): 28,
    ("component", 0, "logN", "Mg II", "fixed"): 28,
    ("component", 0, "logN", "O\\"): 28,
    ("component", 0, "when"): 29,
    ("region", 2): 30,
    ("region", 2, "part"): 31,
    ("region", 2, "part", 0): 31,
    ("region", 2, "part", 1): 32,
    ("region", 2, "part", 1, "end"): 33,
}


@pytest.mark.parametrize("newline", ["\n", "\r\n"])
def test_lines_of_the_example(newline):
    found = locate_keys(EXAMPLE.replace("\n", newline))
    assert {path: found.get(path) for path in LINES} == LINES


def test_every_located_path_is_in_the_parsed_data():
    data = tomllib.loads(EXAMPLE)
    for path in locate_keys(EXAMPLE):
        value = data
        for part in path:
            value = value[part]


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("absorber", "redshift"), 10),
        (("region", 1, "transition"), 20),
        (("region", 0, "window", 5), 16),
        (("component", 0, "logN", "Si II", "min"), 28),
        (("fit", "seed"), 1),
        ((), 1),
    ],
)
def test_a_missing_key_is_at_the_table_that_lacks_it(path, line):
    _, source = parse_toml(EXAMPLE, "name.toml")
    assert source.line(path) == line
    assert source.place(path) == f"name.toml:{line}"


def test_an_implied_table_is_at_its_own_header_once_it_has_one():
    assert locate_keys("[a.b]\nc = 1\n[a]\nd = 2\n")[("a",)] == 3


def test_sources_are_equal_survive_copies_and_work_without_text():
    _, source = parse_toml(EXAMPLE, "name.toml")
    assert source == TomlSource()
    assert pickle.loads(pickle.dumps(source)).place(("region", 1)) == "name.toml:20"
    assert copy.deepcopy(source).line(("region", 1)) == 20
    assert TomlSource("memory").place(("region", 1)) == "memory"


@pytest.mark.parametrize(
    ("text", "line", "fragment"),
    [
        ("a = 1\nb 2\n", 2, "not valid TOML"),
        ("a = 1\n\n[table\nb = 2\n", 3, "not valid TOML"),
        ('a = "x\nb = 2\n', 1, "not valid TOML"),
        ("a = 1\nb = [1, 2\n", 2, "not valid TOML"),
        ("a = 1\nb = 2\n\na = 3\n", 4, "key 'a' is given twice; the first is in line 1"),
        ("[t]\na = 1\n[s]\n[t]\n", 4, "table [t] is given twice; the first is in line 1"),
        ("a = 1\na = [\n1,\n2]\n", 2, "key 'a' is given twice"),
        ("a = { b = 1, b = 2 }\n", 1, "key 'b' is given twice"),
        ("a = 1\n[a]\n", 2, "not valid TOML"),
        ("a = 1\n\nb = " + "[" * 40 + "]" * 40, 3, "nested deeper than 32"),
        ("a = 1\nb = " + "[" * 100_000, 2, "nested deeper than 32"),
        ("\n" + ".".join("a" * 100_000) + " = 1", 2, "nested deeper than 32"),
        ("\n[" + ".".join("a" * 100_000) + "]", 2, "nested deeper than 32"),
        ("a = 1\nb = " + "9" * 5000, 2, "too many digits"),
    ],
)
def test_bad_documents(text, line, fragment):
    with pytest.raises(JobError) as caught:
        parse_toml(text, "bad.toml")
    (fault,) = caught.value.faults
    assert fault.startswith(f"bad.toml:{line}: ")
    assert fragment in fault


KEYS = st.one_of(
    st.text(alphabet="abcXYZ019_-", min_size=1, max_size=4),
    # Everything that could lead the scanner astray inside a quoted key.
    st.text(alphabet="ab .=#[]{}'\"\\,é\u2028", min_size=0, max_size=4),
)


def quoted(text):
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def key_text(draw, key):
    bare = key != "" and all(c in "abcXYZ019_-" for c in key)
    if bare and draw(st.booleans()):
        return key
    if "'" not in key and draw(st.booleans()):
        return f"'{key}'"
    return quoted(key)


class Document:
    """Writes random TOML and notes the line of each key as it is written."""

    def __init__(self, draw):
        self.draw = draw
        self.text = ""
        self.lines = {}

    def note(self, path):
        self.lines[path] = self.text.count("\n") + 1

    def filler(self, lines_allowed):
        kinds = ["", " ", "\t"]
        if lines_allowed:
            kinds += ["\n", "\n# [x] = ']'\n", "# a = 1\n\n"]
        self.text += self.draw(st.sampled_from(kinds))

    def value(self, path, depth):
        kinds = ["scalar", "string"] + (["array", "table"] if depth < 3 else [])
        kind = self.draw(st.sampled_from(kinds))
        if kind == "scalar":
            scalars = ["1", "-2.5e3", "true", "inf", "1979-05-27 07:32:00", "0x1f"]
            self.text += self.draw(st.sampled_from(scalars))
        elif kind == "string":
            strings = ['"a # b"', "'[x]'", '"""\nq = 1\n"""""', "'''\n[t]\n''x'''", '"\\"]"', '""']
            self.text += self.draw(st.sampled_from(strings))
        elif kind == "array":
            self.text += "["
            for index in range(self.draw(st.integers(0, 3))):
                self.text += "," if index else ""
                self.filler(True)
                self.note((*path, index))
                self.value((*path, index), depth + 1)
                self.filler(True)
            self.text += "]"
        else:
            self.text += "{"
            keys = self.draw(st.lists(KEYS, max_size=3, unique=True))
            for index, key in enumerate(keys):
                self.text += ", " if index else " "
                self.assignment(path, key, depth + 1)
            self.text += " }"

    def assignment(self, path, key, depth):
        path = (*path, key)
        self.note(path)
        self.text += key_text(self.draw, key)
        # A dotted key opens a table of its own, so its second part cannot clash with others.
        if self.draw(st.booleans()):
            second = self.draw(KEYS)
            path = (*path, second)
            self.note(path)
            self.text += " . " + key_text(self.draw, second)
        self.text += " = "
        self.value(path, depth)

    def body(self, path):
        for key in self.draw(st.lists(KEYS, max_size=4, unique=True)):
            self.assignment(path, key, 0)
            self.text += self.draw(st.sampled_from(["\n", " # c = [1\n", "\n\n"]))


@st.composite
def documents(draw):
    document = Document(draw)
    document.body(())
    # Names with a character that KEYS does not have cannot clash with keys of the root.
    for table in range(draw(st.integers(0, 3))):
        name = f"table{table}q"
        if draw(st.booleans()):
            document.note((name,))
            document.text += f"[{name}]\n"
            document.body((name,))
        else:
            document.note((name,))
            for index in range(draw(st.integers(1, 3))):
                document.note((name, index))
                document.text += f"[[ {name} ]] # [[{name}]]\n"
                document.body((name, index))
                if draw(st.booleans()):
                    document.note((name, index, "partq"))
                    document.text += f'[{name}."partq"]\n'
                    document.body((name, index, "partq"))
    return document


@settings(max_examples=150, deadline=None)
@given(documents())
def test_each_key_of_a_random_document_is_found_on_its_line(document):
    tomllib.loads(document.text)  # the generator writes valid TOML
    found = locate_keys(document.text)
    assert found == {(): 1, **document.lines}


@settings(max_examples=200, deadline=None)
@given(st.text(alphabet="ab=[]{}\"'.#\n\\, 1", max_size=40))
def test_any_text_is_parsed_or_refused_with_a_line(text):
    try:
        data, source = parse_toml(text, "any.toml")
    except JobError as error:
        (fault,) = error.faults
        assert fault.startswith("any.toml:")
        assert int(fault.split(":")[1]) <= text.count("\n") + 1
        assert "\n" not in fault
    else:
        assert set(data) == {path[0] for path in source.lines if len(path) == 1}
