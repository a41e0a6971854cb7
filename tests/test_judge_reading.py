"""Whatever a table holds, it is read or every line says plainly why not; never a traceback."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.judge_cases import assert_refused_plainly_or_sound, read_or_refused
from tnquench.errors import InputError
from tnquench.judge.candidate import open_candidate
from tnquench.judge.csv_table import read_csv

GOOD = "time,x,energy_density\n1,0,0.1\n1,1,0.2\n"


def problems(text: str) -> list[str]:
    with pytest.raises(InputError) as caught:
        read_csv(text, subject="a.csv")
    assert str(caught.value).splitlines()[0].endswith("nothing was judged")
    return list(caught.value.problems)


def test_table_in_any_order_with_comments_and_blanks() -> None:
    text = """\ufeff# made by hand
 x , energy_density, time,energy_current

# a comment between
0.5,,1.0,-2e-3
-0.5,0.25,2.0,
,,,
"""
    fields, remarks = read_csv(text.removeprefix("\ufeff"), subject="a.csv")
    assert set(fields) == {"energy_density", "energy_current"}
    density, current = fields["energy_density"], fields["energy_current"]
    assert (density.times.tolist(), density.positions.tolist(), density.values.tolist()) == (
        [2.0],
        [-0.5],
        [0.25],
    )
    assert (current.times.tolist(), current.positions.tolist()) == ([1.0], [0.5])
    assert current.values.tolist() == [-2e-3]
    assert remarks == ()


def test_foreign_columns_are_ignored_and_named() -> None:
    _, remarks = read_csv("time,x,entropy,energy_density\n1,0,abc,0.1\n", subject="a.csv")
    assert remarks == ("column without a meaning here, ignored: entropy",)


BAD_TABLES: dict[str, tuple[str, list[str]]] = {
    "empty": ("", ["no header; begin with the line time,x,energy_density"]),
    "comments alone": ("# nothing\n\n", ["no header"]),
    "header alone": ("time,x,energy_density\n", ["no values below the header"]),
    "no time": ("t,x,energy_density\n1,0,0.1\n", ['no column "time"; found: t, x, energy_density; call "t"']),
    "no place": ("time,site,energy_density\n1,0,1\n", ['no column "x"; found: time, site']),
    "no observable": ("time,x,entropy\n1,0,1\n", ["no observable among the columns; allowed:"]),
    "misspelt": ("time,x,energy_densty\n1,0,1\n", ['did you mean "energy_density"?']),
    "column twice": ("time,x,x,energy_density\n1,0,0,1\n", ['column "x" stands 2 times; keep one']),
    "blanks": ("time x energy_density\n1 0 1\n", ["line 1: separate columns by commas, not by blanks"]),
    "semicolons": ("time;x;energy_density\n1;0;1\n", ["separate columns by commas, not by semicolons"]),
    "no number": (GOOD + "2,0,abc\n", ['line 4, energy_density: "abc" is not a number; write numbers like']),
    "many no numbers": (GOOD + "2,0,a\n2,1,b\n2,2,c\n", ['line 4, energy_density: "a" is not', ]),
    "underscore": (GOOD + "2,0,1_0\n", ['"1_0" is not a number']),
    "blank time": (GOOD + ",0,0.3\n", ["line 4, time: empty beside values"]),
    "not a number": (GOOD + "2,0,nan\n", ["line 4, energy_density: nan is not a finite number; leave"]),
    "infinite": (GOOD + "2,0,-inf\n", ["line 4, energy_density: -inf is not a finite number"]),
    "infinite place": (GOOD + "2,inf,1\n", ["line 4, x: inf is not a finite number"]),
    "huge": (GOOD + "2,0,1e300\n", ["line 4, energy_density: 1e+300 is beyond"]),
    "twice": (GOOD + "1,1,0.2\n", ["line 4, energy_density: the point t = 1, x = 1 stands already in"]),
    "short row": (GOOD + "2,0\n", ["line 4: 2 cells under a header of 3; give every row as many"]),
    "several": (GOOD + "2\n2,0,q\n2,z,1\n", ["line 4: 1 cells", 'energy_density: "q"', 'x: "z"']),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_TABLES)
def test_every_problem_of_a_table_is_one_line(case: str) -> None:
    text, expected = BAD_TABLES[case]
    found = problems(text)
    assert len(found) == len(expected), found
    for line, part in zip(found, expected, strict=True):
        assert part in line
        assert "\n" not in line


def test_problems_of_one_kind_are_counted() -> None:
    assert problems(GOOD + "2,0,a\n2,1,b\n2,2,c\n")[0].endswith("(and 2 more of this kind)")


@pytest.mark.parametrize("content", [b"\x93NUMPY\x01\x00v\x00", b"\x80\x04\x95pickle", b"\xff\xfet\x00"])
def test_other_files_are_refused(tmp_path: Path, content: bytes) -> None:
    file = tmp_path / "candidate"
    file.write_bytes(content)
    with pytest.raises(InputError, match="not UTF-8 text, nor HDF5 or netCDF"):
        open_candidate(file)


def test_missing_and_impossible_files_are_refused(tmp_path: Path) -> None:
    for source, said in (
        (tmp_path / "none.csv", "no such file"),
        ("/dev/null", "neither a file nor a folder"),
        ("a\0b", "cannot be read"),
        (tmp_path, "no such dataset"),
    ):
        with pytest.raises(InputError, match=said):
            open_candidate(source)


def test_huge_file_is_refused_unread(tmp_path: Path) -> None:
    file = tmp_path / "huge.csv"
    with file.open("wb") as stream:
        stream.truncate(2**31)
    with pytest.raises(InputError, match="2048 MB; allowed: 256 MB"):
        open_candidate(file)


def test_columns_in_memory() -> None:
    candidate = open_candidate({"time": [1, 2], "x": [0, 0], "energy_density": [0.1, 0.2]})
    assert candidate.fields["energy_density"].values.tolist() == [0.1, 0.2]
    for bad, said in (
        ({"time": [1, 2], "x": [0], "energy_density": [0.1, 0.2]}, r"x: shape \(1,\); must be columns"),
        ({"time": [1], "x": [0], "energy_density": ["a"]}, "not all numbers"),
        ({"time": [1], "energy_density": [1]}, 'no column "x"'),
        ({"time": [1.0], "x": [0.0], "energy_density": [np.nan]}, "not a finite number"),
    ):
        with pytest.raises(InputError, match=said):
            open_candidate(bad)  # type: ignore[arg-type]


cells = st.one_of(
    st.floats().map(repr),
    st.integers(-3, 3).map(str),
    st.sampled_from(["", " ", "1e-3", "abc", '"', "'", "#", "1;2", "\t", "\x00", "1_0", "nan", "٣", "1d-3"]),
    st.text(max_size=4),
)
names = st.sampled_from(["time", "x", "energy_density", "energy_current", "t", "", "energy_densty", "beta"])
rows = st.lists(st.lists(cells, max_size=4).map(",".join), max_size=6)


@given(st.one_of(st.just("time,x,energy_density"), st.lists(names, max_size=5).map(",".join)), rows)
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
def test_any_text_is_read_or_refused_plainly(header: str, lines: list[str]) -> None:
    fields, refusal = read_or_refused(lambda: read_csv("\n".join([header, *lines]), subject="a.csv"))
    assert_refused_plainly_or_sound(fields, refusal)
