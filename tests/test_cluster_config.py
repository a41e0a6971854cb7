"""The section [cluster]: times and sizes as people write them, plain words for Slurm, and what is refused."""

from __future__ import annotations

import re
from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.config_cases import MINIMAL, problems, toml
from tnquench.config.changes import changes, forbidden, shortened
from tnquench.config.cluster import (
    ENGINES,
    RESOURCES,
    TASKS,
    Cluster,
    parse_address,
    parse_duration,
    parse_memory,
    parse_resource,
    parse_word,
    with_options,
)
from tnquench.config.load import read_config
from tnquench.errors import InputError


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("2h", 7200.0), ("1h30m", 5400.0), ("90m", 5400.0), ("45s", 45.0), ("1.5h", 5400.0),
        ("2d", 172_800.0), ("1d2h3m4s", 93_784.0), ("10min", 600.0), ("00:30:00", 1800.0),
        ("1-12:00:00", 129_600.0),
        ("100:00:00", 360_000.0), (" 2H ", 7200.0),
    ],
)  # fmt: skip
def test_times(text, seconds):
    assert parse_duration(text) == seconds


@pytest.mark.parametrize(
    "text",
    ["", " ", "2", "2 h 3", "h", "0s", "-1h", "1h2d", "30:00", "00:60:00", "1e9h", "999999999d", "٣h", "nan"],
)
def test_what_is_no_time(text):
    with pytest.raises(ValueError, match=r"must be|go to 59"):
        parse_duration(text)


@pytest.mark.parametrize(
    ("text", "size"),
    [
        ("8GB", 8 * 10**9), ("500MB", 5 * 10**8), ("16GiB", 16 * 2**30), ("1.5 GB", 1_500_000_000),
        ("2tb", 2 * 10**12), ("2000kB", 2_000_000),
    ],
)  # fmt: skip
def test_sizes(text, size):
    assert parse_memory(text) == size


@pytest.mark.parametrize(
    "text", ["", "8", "8G", "GB", "-1GB", "0GB", "1B", "1kB", "1e3GB", "999999999TB", "8 GB 1"]
)
def test_what_is_no_size(text):
    with pytest.raises(ValueError, match="must be"):
        parse_memory(text)


@given(st.text(max_size=30))
def test_any_text_is_read_or_refused(text):
    for parse in (parse_duration, parse_memory, parse_word, parse_address, parse_resource):
        with suppress(ValueError):
            assert parse(text)


@pytest.mark.parametrize("text", ["--wrap=reboot", "a b", "a;b", "$(a)", "a\nb", "", "-a", "ä", "a" * 65])
def test_a_word_is_no_option_and_no_shell(text):
    with pytest.raises(ValueError, match="one plain word"):
        parse_word(text)


@pytest.mark.parametrize(
    "text", ["wrap=reboot", "export=ALL", "output=/etc/passwd", "chdir=/", "constraint", "gres=gpu 1",
             "qos=$(a)",             "nodelist=a\nb", "exclusive=", "", "=x", "--qos=a"],
)  # fmt: skip
def test_resources_are_from_a_list(text):
    with pytest.raises(ValueError, match=r"no such resource|needs a value|one plain word"):
        parse_resource(text)


@pytest.mark.parametrize(
    "text", ["exclusive", "constraint=a|b&c", "gres=lustre:2", "nodelist=n[1-4,7]", "qos=long"]
)
def test_resources_that_may_be_asked(text):
    assert parse_resource(text) == text


@pytest.mark.parametrize("text", ["tcp://a:1", "tls://node-1.site.org:8786", "tcp://[fe80::1]:80", "slurm"])
def test_addresses(text):
    assert parse_address(text) == text


@pytest.mark.parametrize(
    "text", ["", "a:1", "http://a:1", "tcp://a", "tcp://a:b", "tcp://a:1/x", "inproc://1"]
)
def test_what_is_no_address(text):
    with pytest.raises(ValueError, match="address of a Dask scheduler"):
        parse_address(text)


def test_settings_in_seconds_and_bytes():
    cluster = Cluster(walltime="2h", memory="8GB")
    assert (cluster.walltime_seconds, cluster.memory_bytes, cluster.notice_seconds) == (
        7200.0,
        8 * 10**9,
        180.0,
    )
    unlimited = Cluster()
    assert (unlimited.walltime_seconds, unlimited.memory_bytes, unlimited.notice_seconds) == (
        None,
        None,
        180.0,
    )
    assert Cluster(walltime="1m").notice_seconds == 15.0


WRONG = [
    ({"walltime": "2 weeks"},
     '[cluster] walltime = "2 weeks": must be a time such as "2h", "1h30m", "00:30:00" or "1-12:00:00" '
     "(days-hours)"),
    ({"walltime": 7200}, "[cluster] walltime = 7200: must be text in quotes"),
    ({"memory": "8G"}, '[cluster] memory = "8G": must be a size such as "8GB", "500MB" or "16GiB"'),
    ({"walltime": "2m", "notice": "2m"},
     '[cluster] notice = "2m": must be shorter than walltime = "2m"'),
    ({"engine": "slrum"},
     '[cluster] engine = "slrum": must be "local", "dask" or "slurm"; did you mean "slurm"?'),
    ({"threads": 0}, "[cluster] threads = 0: must be from 1 to 1024"),
    ({"partition": "a b"},
     '[cluster] partition = "a b": must be one plain word: letters, digits and _ . + -, a letter or digit '
     "first"),
    ({"resources": ["constraint=a", "exclusiv"]},
     '[cluster] resources[1] = "exclusiv": no such resource; did you mean "exclusive"?'),
    ({"resources": "exclusive"}, '[cluster] resources = "exclusive": must be a list of texts in quotes'),
    ({"wall_time": "2h"}, '[cluster] wall_time: no such setting; did you mean "walltime"?'),
    ({"setup": "module load x"},
     "[cluster] setup: no such setting; allowed: engine, tasks, walltime, notice, memory, threads, jobs, "
     "scheduler, partition, account, resources, requeue"),
]  # fmt: skip


@pytest.mark.parametrize(("table", "line"), WRONG)
def test_what_is_wrong_is_said_in_one_line(table, line):
    assert problems({**MINIMAL, "cluster": table}) == [line]


def test_options_come_first_and_are_checked():
    cluster = with_options(Cluster(walltime="2h", jobs=3), {"walltime": "1h", "jobs": None}, subject="a.toml")
    assert (cluster.walltime, cluster.jobs) == ("1h", 3)
    with pytest.raises(InputError, match="must be shorter than walltime"):
        with_options(Cluster(notice="10m"), {"walltime": "5m"}, subject="a.toml")


def test_choices_are_those_of_the_schema():
    kinds = {name: Cluster.model_fields[name].annotation for name in ("engine", "tasks")}
    assert [kind.__args__ for kind in kinds.values()] == [ENGINES, TASKS]  # type: ignore[union-attr]
    assert all(re.fullmatch(r"[a-z-]+", name) for name in RESOURCES)


def test_what_may_change_between_a_run_and_its_continuation():
    tables = {**MINIMAL, "cluster": {"walltime": "2h"}, "title": "a"}
    earlier = read_config(toml(tables), subject="a")
    same = read_config(toml({**tables, "title": "b", "cluster": {"engine": "slurm"}}), subject="a")
    assert changes(earlier, same) == {}
    evolution = {**MINIMAL["evolution"], "until": 2.0}
    longer = read_config(toml({**tables, "evolution": evolution, "budget": {"resolve_at": 2.0}}), subject="a")
    assert changes(earlier, longer) == {"budget.resolve_at": (3.0, 2.0), "evolution.until": (1.0, 2.0)}
    assert forbidden(changes(earlier, longer)) == []
    assert shortened(changes(earlier, longer)) == []
    assert forbidden(changes(longer, earlier)) == []
    assert shortened(changes(longer, earlier)) == [
        "evolution.until: 1.0 now, but the folder's run goes to 2.0"
    ]
    other = read_config(toml({**tables, "evolution": {**evolution, "cut": "svd"}}), subject="a")
    assert forbidden(changes(earlier, other)) == ['evolution.cut: "svd" now, "subspace" in the folder']
