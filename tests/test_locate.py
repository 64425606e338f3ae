"""Places: the line of every key, however a study is laid out. Neighbour: test_reading reads the lines in messages."""

from __future__ import annotations

import pytest

from explorer.study.locate import line_of

LAID_OUT = """\
# gain, period, plant and requirements are named in a comment
title = "gain = 3, plant and requirements"

[plant]
transfer = "gain_of/(lag*s + 1)"     # lag = 3
dead_time = 0
[plant.parameters]
gain_of = { nominal = 2, tolerance = nan }
lag.from = 1
lag.to = 2
"odd key" = 1

[sweep]
gain = { from = 1, to = nan }
period.from = 1
period.to = 2

[[requirements]]
measure = "stability"
[[requirements]]
measure = "stability"
[[requirements]]
measure = "stability"
name = "measure"
"""

LINES = [
    (("title",), 2), (("plant",), 4), (("plant", "transfer"), 5), (("plant", "dead_time"), 6),
    (("plant", "parameters"), 7), (("plant", "parameters", "gain_of"), 8),
    (("plant", "parameters", "gain_of", "tolerance"), 8), (("plant", "parameters", "lag"), 9),
    (("plant", "parameters", "lag", "to"), 10), (("plant", "parameters", "odd key"), 11), (("sweep", "gain"), 14),
    (("sweep", "gain", "to"), 14), (("sweep", "period"), 15), (("sweep", "period", "to"), 16),
    (("requirements",), 18), (("requirements", 0), 18), (("requirements", 1), 20), (("requirements", 2), 22),
    (("requirements", 1, "measure"), 21), (("requirements", 2, "name"), 24),
]  # fmt: skip


@pytest.mark.parametrize(("path", "line"), LINES)
def test_every_key_has_its_line(path, line):
    assert line_of(LAID_OUT, path) == line


PARENTS = [
    (("loop",), 1), (("plant", "sensor"), 4), (("sweep", "gain", "points"), 14), (("requirements", 1, "band"), 20),
    (("plant", "parameters", "lag", "nominal", "x"), 9), (("requirements", 7, "band"), 18),
]  # fmt: skip


@pytest.mark.parametrize(("path", "line"), PARENTS)
def test_a_missing_key_is_reported_where_it_belongs(path, line):
    assert line_of(LAID_OUT, path) == line


def test_other_layouts_of_the_same_tables():
    inline = 'requirements = [\n  { measure = "a" },\n  { measure = "b" },\n]\n'
    assert line_of(inline, ("requirements", 1, "measure")) == 3
    headers = "[plant.parameters]\nlag = 1\n[plant]\ntransfer = 1\n"
    assert line_of(headers, ("plant", "parameters")) == 1
    assert line_of(headers, ("plant", "transfer")) == 4
    windows = LAID_OUT.replace("\n", "\r\n")
    assert line_of(windows, ("requirements", 2, "name")) == 24
    assert line_of("", ("plant",)) is None


def test_a_key_that_cannot_be_found_by_its_text_falls_back_to_its_table():
    assert line_of('[plant]\n"tr\\u0061nsfer" = 1\n', ("plant", "transfer")) == 1
