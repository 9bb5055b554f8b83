"""Line numbers of keys, on text written so that every key says its own line."""

import tomllib

from manybody.workflow.places import Lines

TEXT = """# comment with = and [brackets]
title = "one # not a comment"   # line 2

[lattice] # line 4
shape = 'chain'
sites = [
  4, # a ] bracket
  6,
]
"quoted key" = 1
[[term]] # 11
exchange = [[1, 0, 0],
            [0, 1, 0],
            [0, 0, 1]]
field = \"\"\"two
lines = 3
\"\"\"
[[term]] # 18
site = { even = 1, odd = "]" }
a.b.c = 1
[term.inner] # 21
x = '''
y = 1'''
[parameters]
d = [0.0]
"""


def test_lines_of_keys():
    tomllib.loads(TEXT)
    lines = Lines(TEXT)
    assert lines.of(("title",)) == 2
    assert lines.of(("lattice",)) == 4
    assert lines.of(("lattice", "sites")) == lines.of(("lattice", "sites", 1)) == 6
    assert lines.of(("lattice", "quoted key")) == 10
    assert lines.of(("term", 0)) == 11 and lines.of(("term", 0, "exchange", 2, 1)) == 12
    assert lines.of(("term", 0, "field")) == 15
    assert lines.of(("term", 1)) == 18 and lines.of(("term", 1, "site", "odd")) == 19
    assert lines.of(("term", 1, "a", "b")) == 20
    assert lines.of(("term", 1, "inner", "x")) == 22
    assert lines.of(("parameters", "d")) == 25
    assert lines.of(()) is None and lines.of(("absent",)) is None


def test_windows_line_ends():
    assert Lines(TEXT.replace("\n", "\r\n")).of(("parameters", "d")) == 25
