"""Strict YAML: what no configuration needs is refused at its place, with either of PyYAML's parsers."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
import yaml

from hobnail.config import strict_yaml
from hobnail.config.strict_yaml import Listing, Mapping, Node, Report, Scalar, parse, read_file, shown


@pytest.fixture(params=["C", "Python"], autouse=True)
def parser(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    loader = yaml.CBaseLoader if request.param == "C" else yaml.BaseLoader
    monkeypatch.setattr(strict_yaml, "_LOADER", loader)


def only_problem(data: bytes) -> tuple[int, int, str, str]:
    """Line, column, key path and text of the one problem that a file must have."""
    report = Report("robot.yaml")
    parse(data, report)
    (problem,) = report.problems()
    return problem.line, problem.column, problem.key_path, str(problem)


def test_nodes_know_their_place_and_path() -> None:
    report = Report("robot.yaml")
    root = parse(b"a: 1\nb:\n  - c: 'x'\n  - {d: on}\n", report)
    assert not report.problems()
    assert isinstance(root, Mapping)
    first = root.entries["a"]
    assert isinstance(first, Scalar)
    assert (first.path, first.line, first.column, first.text, first.plain) == ("a", 1, 4, "1", True)
    listing = root.entries["b"]
    assert isinstance(listing, Listing)
    quoted = listing.items[0]
    assert isinstance(quoted, Mapping)
    inner = quoted.entries["c"]
    assert isinstance(inner, Scalar)
    assert (inner.path, inner.line, inner.column, inner.plain) == ("b[0].c", 3, 8, False)
    flow = listing.items[1]
    assert isinstance(flow, Mapping)
    word = flow.entries["d"]
    assert isinstance(word, Scalar)
    assert (word.path, word.line, word.column, word.text) == ("b[1].d", 4, 9, "on")


@pytest.mark.parametrize(
    ("data", "line", "column", "path", "text"),
    [
        (b"a: &x 1\n", 1, 4, "a", "anchor"),
        (b"a: 1\nb: *x\n", 2, 4, "b", "anchor or alias"),
        (b"a: !!python/object/apply:os.system [x]\n", 1, 4, "a", "the tag"),
        (b"a: !!float 1\n", 1, 4, "a", "the tag"),
        (b"a: !%0a 1\n", 1, 4, "a", "the tag"),
        (b"a: !mine 1\n", 1, 4, "a", "the tag"),
        (b"a: 1\na: 2\n", 2, 1, "a", "a second a"),
        (b"x:\n  a: 1\n  b: 1\n  a: 1\n", 4, 3, "x.a", "first is in line 2"),
        (b"a: 1\n'a': 2\n", 2, 1, "a", "a second a"),
        (b"a: 1\n--- \nb: 2\n", 2, 1, "", "a second document"),
        (b"a: 1\n\tb: 2\n", 2, 1, "", "a tab"),
        (b"a:\t1\n", 1, 3, "", "a tab"),
        (b"\xef\xbb\xbfa: 1\n", 1, 1, "", "byte order mark"),
        ("a: 1\n".encode("utf-16"), 1, 1, "", "byte 0xff"),
        (b"a: 1\n# 20 \xb0C\n", 2, 6, "", "byte 0xb0"),
        (b"a: 1\n# \xc2\xb0 \xe2\x80\xa8b: 2\n", 2, 5, "", "U+2028"),
        (b"a: 1\nb: \x00\n", 2, 4, "", "U+0000"),
        (b"? [a]\n: 1\n", 1, 3, "", "not a word"),
        (b"- a\n", 1, 1, "", "a mapping"),
        (b"text\n", 1, 1, "", "text"),
        (b"a: [[[[[[[[[[[[1]]]]]]]]]]]]\n", 1, 13, "a[0][0][0][0][0][0][0][0][0]", "nested too deep"),
        (b"", 0, 0, "", "an empty file"),
        (b"# nothing but a comment\n", 0, 0, "", "an empty file"),
        (b"---\n...\n", 0, 0, "", "an empty file"),
    ],
)
def test_refused_at_its_place(data: bytes, line: int, column: int, path: str, text: str) -> None:
    found = only_problem(data)
    assert found[:3] == (line, column, path)
    assert text in found[3]


@pytest.mark.parametrize(
    "data", [b"a: [1, 2\nb: 3\n", b"a: 'x\n", b"a: b: c\n", b"a: }\n", b"@: 1\n", b"%BAD\n", b"a: |\n b\nc"]
)
def test_broken_yaml_is_told_with_its_place(data: bytes) -> None:
    line, column, _, text = only_problem(data)
    assert line >= 1
    assert column >= 1
    assert "YAML" in text


def test_a_last_line_cut_short_is_told_where_the_file_ends() -> None:
    line, column, path, _ = only_problem(b"a: 1\nb: {c: 2, ")
    assert (line, column, path) == (2, 11, "b")


@pytest.mark.parametrize(
    "data", [b"a: 1\n?", b"a: 1\n?\n", b"a: 1\nb:\n  ?", b"a: 1\nb:\n  c: 2\n  ?\n", b"a:"]
)
def test_what_is_missing_at_the_end_has_its_place_in_the_file(data: bytes) -> None:
    root = parse(data, Report("robot.yaml"))
    assert root is not None
    lines = data.split(b"\n")

    def check(node: Node) -> None:
        assert 1 <= node.line <= len(lines)
        assert 1 <= node.column <= len(lines[node.line - 1]) + 1
        for each in [*node.keys.values(), *node.entries.values()] if isinstance(node, Mapping) else ():
            check(each)

    check(root)


def test_merge_keys_are_plain_words() -> None:
    """`<<` has no meaning of its own, so that it ends as an unknown key."""
    report = Report("robot.yaml")
    root = parse(b"<<: {a: 1}\n", report)
    assert root is not None
    assert list(root.entries) == ["<<"]


def test_nothing_is_interpreted() -> None:
    """PyYAML's own loader would make 8, True, 750 and 1.0 of these."""
    report = Report("robot.yaml")
    root = parse(b"a: 010\nb: on\nc: 12:30\nd: 1_0.0\ne: 0x10\n", report)
    assert root is not None
    texts = [entry.text for entry in root.entries.values() if isinstance(entry, Scalar)]
    assert texts == ["010", "on", "12:30", "1_0.0", "0x10"]


def test_alias_bomb_is_refused_at_its_first_anchor() -> None:
    lines = ["a0: &a0 [x, x]"] + [f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 9)}]" for n in range(1, 20)]
    line, column, path, _ = only_problem("\n".join(lines).encode())
    assert (line, column, path) == (1, 5, "a0")


def test_a_hundred_problems_are_enough() -> None:
    report = Report("robot.yaml")
    parse(b"a: 1\n" * 500, report)
    problems = report.problems()
    assert len(problems) == strict_yaml.MAX_PROBLEMS + 1
    assert "stopped looking" in problems[-1].found


def test_odd_keys_cannot_break_a_message() -> None:
    report = Report("robot.yaml")
    parse(b'"a\\nb\\x1b[31m": 1\n"a\\nb\\x1b[31m": 1\n' + b"k" * 5000 + b": 1\n", report)
    for problem in report.problems():
        assert str(problem).isprintable()
        assert len(str(problem)) < 300


def test_values_over_several_lines_cannot_break_a_message() -> None:
    report = Report("robot.yaml")
    root = parse(b"a: 0\n\n\n  .5\n", report)
    assert root is not None
    assert shown(root.entries["a"]) == repr("0\n\n.5")


def told(path: Path) -> str:
    report = Report(str(path))
    assert read_file(path, report) is None
    (problem,) = report.problems()
    return str(problem)


def test_what_is_no_file_is_told(tmp_path: Path) -> None:
    assert "no such file" in told(tmp_path / "none.yaml")
    assert "a directory" in told(tmp_path)
    assert "Not a directory" in told(Path("/dev/null/robot.yaml"))
    assert "neither a file" in told(Path("/dev/zero"))
    os.mkfifo(tmp_path / "pipe")
    assert "neither a file" in told(tmp_path / "pipe")
    (tmp_path / "loop").symlink_to(tmp_path / "loop")
    assert "loop" in told(tmp_path / "loop")
    assert "null" in told(tmp_path / "a\0b")
    assert "name too long" in told(tmp_path / ("x" * 300))


def test_a_huge_file_is_told_unread(tmp_path: Path) -> None:
    path = tmp_path / "huge.yaml"
    with path.open("wb") as file:
        file.truncate(1 << 40)  # sparse
    assert "more than 1024 KiB" in told(path)
