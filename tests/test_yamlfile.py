"""Reading YAML: values, lines, and a clean refusal of everything else."""

import math
import os
import time

import pytest
import yaml

from carriersim import yamlfile
from carriersim.faults import ScenarioError
from carriersim.yamlfile import MAX_BYTES, MAX_DEPTH, MAX_VALUES, read, read_file, read_value


@pytest.fixture(params=["libyaml", "python"], autouse=True)
def parser(request, monkeypatch):
    """Run every test with the C parser and with the one in Python."""
    if request.param == "python":
        monkeypatch.setattr(yamlfile, "_LOADER", yaml.SafeLoader)
    elif not hasattr(yaml, "CSafeLoader"):
        pytest.skip("PyYAML without libyaml")
    return request.param


def refusal(text: str) -> str:
    with pytest.raises(ScenarioError) as caught:
        read(text, "s.yaml")
    return str(caught.value)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1", 1),
        ("-12", -12),
        ("+3", 3),
        ("0", 0),
        ("1e3", 1000.0),
        ("1E-3", 0.001),
        ("-1e+3", -1000.0),
        ("1.", 1.0),
        (".5", 0.5),
        ("2.5e2", 250.0),
        ("0.1", 0.1),
        ("true", True),
        ("False", False),
        ("null", None),
        ("~", None),
        ("", None),
        ("yes", "yes"),
        ("off", "off"),
        ("010", "010"),
        ("1_000", "1_000"),
        ("0x10", "0x10"),
        ("1:30", "1:30"),
        ("2024-01-01", "2024-01-01"),
        ("'1'", "1"),
        ('"true"', "true"),
        (".inf", math.inf),
        ("-.INF", -math.inf),
        ("1e999", math.inf),
        ("9" * 400, math.inf),
        ("[1, {a: 2e0}]", [1, {"a": 2.0}]),
        ("{left: {b: [ ]}}", {"left": {"b": []}}),
    ],
)
def test_values(text, value):
    found = read_value(text)
    assert found == value
    assert type(found) is type(value)


def test_not_a_number_is_read_as_such():
    assert math.isnan(read_value(".NaN"))


def test_lines_of_keys_and_entries():
    text = (
        "# a comment\na:\n  b: 1\n  c:\n    - 1\n    - {d: 2,\n       e: 3}\nf: |\n  x\n  y\ng: 1\n"
    )
    document, faults = read(text, "s.yaml")
    assert faults == []
    assert document.data == {"a": {"b": 1, "c": [1, {"d": 2, "e": 3}]}, "f": "x\ny\n", "g": 1}
    lines = {("a",): 2, ("a", "b"): 3, ("a", "c"): 4, ("a", "c", 0): 5, ("a", "c", 1): 6}
    lines |= {("a", "c", 1, "d"): 6, ("a", "c", 1, "e"): 7, ("f",): 8, ("g",): 11}
    for path, line in lines.items():
        assert document.line(path) == line
    assert document.line(("a", "c", 1, "missing")) == 6
    assert document.line(("missing",)) == 2  # where the top level begins


def test_duplicate_keys_are_all_named_and_the_first_stays():
    text = "a: 1\nb: {c: 1, c: 2}\na: {x: [1]}\nd: 4\na: 5\n"
    document, faults = read(text, "s.yaml")
    assert [str(fault) for fault in faults] == [
        "s.yaml, line 2: b.c: duplicate key: it stands in line 2 already",
        "s.yaml, line 3: a: duplicate key: it stands in line 1 already",
        "s.yaml, line 5: a: duplicate key: it stands in line 1 already",
    ]
    assert document.data == {"a": 1, "b": {"c": 1}, "d": 4}


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "s.yaml: is empty: a scenario is a mapping of keys to values"),
        ("# only a comment\n", "s.yaml: is empty"),
        ("- a\n- b\n", "s.yaml: found a list of 2 entries at the top level; allowed: a mapping"),
        ("hello\n", "s.yaml: found 'hello' (text) at the top level; allowed: a mapping"),
        ("a: &x 1\n", "s.yaml, line 1: the anchor &x is refused: write values out"),
        ("a: 1\nb: *x\n", "s.yaml, line 2: the alias *x is refused: write the value out"),
        ("a: &x {b: 1}\nc:\n  <<: *x\n", "s.yaml, line 3: the alias *x is refused"),
        ("a: !!float 1\n", "the tag tag:yaml.org,2002:float is refused: write plain values"),
        ("a: !!python/object/apply:os.getcwd []\n", "os.getcwd is refused"),
        ("a: 1\n---\nb: 2\n", "s.yaml, line 2: holds more than one YAML document"),
        ("[1]: 2\n", "s.yaml, line 1: a key must be text, not a mapping or list"),
        ("? {a: 1}\n: 2\n", "a key must be text, not a mapping or list"),
        ("a:\n\t- b\n", "s.yaml, line 2: is not valid YAML"),
        ("a:\n\t- b\n", "indent with spaces, not tabs"),
        ("a: 1\nb: c: d\n", "s.yaml, line 2: is not valid YAML: mapping values are not allowed"),
        ("a: 1\nb: [1, 2", "s.yaml, line 2: is not valid YAML: while parsing a flow sequence"),
        ("a: 'x\n", "is not valid YAML: while scanning a quoted scalar"),
        ("a: 1\nb: x\x07\n", "s.yaml, line 2: holds the control character '\\x07'"),
        ("a: \ud800\n", "s.yaml, line 1: holds the control character '\\ud800'"),
    ],
)
def test_refused(text, message):
    assert message in refusal(text)


def test_several_marks_are_named_at_once():
    lines = refusal("a: &x 1\nb: *x\nc: !t 3\nd: [").splitlines()
    assert len(lines) == 4
    for line, part in zip(
        lines, ["anchor &x", "alias *x", "tag !t", "not valid YAML"], strict=True
    ):
        assert part in line


def nested(depth: int) -> str:
    return "a: " + "[" * (depth - 1) + "]" * (depth - 1)


def test_depth_limit():
    read(nested(MAX_DEPTH), "s.yaml")
    message = f"s.yaml, line 1: is nested more than {MAX_DEPTH} levels deep"
    assert refusal(nested(MAX_DEPTH + 1)) == message


def test_number_of_values_limit(monkeypatch):
    monkeypatch.setattr(yamlfile, "MAX_VALUES", 100)
    read("a: [" + "1," * 97 + "]", "s.yaml")  # the mapping, the key and the list count too
    assert "holds more than 100 values" in refusal("a: [" + "1," * 98 + "]")


def test_size_limit():
    read("a: 1 #" + "x" * (MAX_BYTES - 6), "s.yaml")
    assert refusal("a: 1 #" + "x" * (MAX_BYTES - 5)) == (
        "s.yaml: is too large: 2.0 MB; allowed: at most 2 MB"
    )
    assert "too large" in refusal("a: 1 #" + "é" * (MAX_BYTES // 2))


BOMB = "a: &a [x, x]\n" + "".join(
    f"{name}: &{name} [*{last}, *{last}]\n"
    for last, name in zip("abcdefgh", "bcdefghi", strict=True)
)
HOSTILE = {
    "10 MB": "a" * 10_000_000,
    "alias bomb": BOMB,
    "many anchors": "".join(f"a{i}: &x{i} 1\n" for i in range(100_000)),
    "flow lists": "[" * 1_000_000,
    "flow mappings": "{a: " * 400_000,
    "block lists": "- " * 900_000,
    "complex keys": "? " * 900_000,
    "duplicate keys": "a: 1\n" * 300_000,
    "documents": "---\n" * 400_000,
    "many values": "a: [" + "1," * 2 * MAX_VALUES + "]",
}


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_text_is_refused_soon(name, parser, monkeypatch):
    if parser == "python":
        monkeypatch.setattr(yamlfile, "MAX_VALUES", 5000)  # it needs seconds for all of them
    start = time.process_time()
    message = refusal(HOSTILE[name])
    spent = time.process_time() - start
    assert len(message) < 20_000
    assert spent < (1 if parser == "libyaml" else 5)


def test_file(tmp_path):
    path = tmp_path / "s.yaml"
    path.write_bytes(b"\xef\xbb\xbfname: caf\xc3\xa9\r\nb: 1\r\n")
    document, faults = read_file(path)
    assert (document.data, faults) == ({"name": "café", "b": 1}, [])
    assert document.file == str(path)
    assert document.line(("b",)) == 2


def file_refusal(path) -> str:
    with pytest.raises(ScenarioError) as caught:
        read_file(path)
    return str(caught.value).removeprefix(f"{path}")


def test_files_that_are_not_read(tmp_path):
    assert file_refusal(tmp_path / "none.yaml") == ": there is no such file"
    assert file_refusal(tmp_path) == ": is a directory, not a scenario file"
    assert "cannot be read: " in file_refusal("a\0b")
    assert "cannot be read: " in file_refusal("x" * 5000)

    path = tmp_path / "s.yaml"
    path.write_bytes(b"a: 1\nb: \xe9t\xe9\n")
    assert file_refusal(path) == ", line 2: is not UTF-8 text (byte 0xe9)"
    path.write_bytes("a: 1\n".encode("utf-16"))
    assert file_refusal(path) == ", line 1: is not UTF-8 text (byte 0xff)"
    path.write_bytes(b"x" * 10_000_000)
    assert file_refusal(path) == ": is too large: 10.0 MB; allowed: at most 2 MB"

    fifo = tmp_path / "fifo"
    os.mkfifo(fifo)
    assert file_refusal(fifo) == ": is not a regular file"


def test_unreadable_file(tmp_path, monkeypatch):
    path = tmp_path / "s.yaml"
    path.write_text("a: 1\n")

    def denied(*args, **kwargs):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", denied)
    assert file_refusal(path) == ": cannot be read: permission denied"


def test_default_name():
    assert yamlfile.default_name("a/b/My wire.yaml") == "My wire"
    assert yamlfile.default_name("a\tb\udc80.yaml") == "a_b_"
    assert yamlfile.default_name("") == "scenario"
