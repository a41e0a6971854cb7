"""A dataset is written whole or not at all, and what the layout lacks is refused."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.synthetic_run import synthetic_pieces, write_synthetic_run
from tnquench.dataset.integrity import digest_of
from tnquench.dataset.writer import require_writable, write_run
from tnquench.errors import InputError

SITES, TIMES = 8, 5


@pytest.fixture
def earlier(tmp_path: Path) -> Path:
    """A sound file that stands where a test writes."""
    return write_synthetic_run(tmp_path, sites=SITES, times=TIMES)


@pytest.fixture(scope="module")
def pieces() -> dict[str, Any]:
    return synthetic_pieces(sites=SITES, times=TIMES)


def test_a_second_run_replaces_the_first_and_leaves_nothing_else(tmp_path: Path) -> None:
    folder = tmp_path / "made" / "on the way"
    first = digest_of(write_synthetic_run(folder, sites=6, times=3))
    second = digest_of(write_synthetic_run(folder, sites=8, times=3))
    assert first != second
    assert [entry.name for entry in folder.iterdir()] == ["run.h5"]


@pytest.mark.parametrize("failing", ["fsync", "replace"])
def test_a_failure_keeps_the_earlier_file(
    earlier: Path, monkeypatch: pytest.MonkeyPatch, failing: str
) -> None:
    before = earlier.read_bytes()

    def fail(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    if failing == "fsync":
        monkeypatch.setattr(os, "fsync", fail)
    else:
        monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(InputError, match="cannot be written: No space left on device") as caught:
        write_synthetic_run(earlier.parent, sites=6, times=3)
    assert len(caught.value.problems) == 1
    assert earlier.read_bytes() == before
    assert [entry.name for entry in earlier.parent.iterdir()] == ["run.h5"]


def test_an_interrupt_leaves_no_partial_file(earlier: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = earlier.read_bytes()

    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    with pytest.raises(KeyboardInterrupt):
        write_synthetic_run(earlier.parent, sites=6, times=3)
    assert earlier.read_bytes() == before
    assert [entry.name for entry in earlier.parent.iterdir()] == ["run.h5"]


def test_a_file_size_limit_of_the_system_is_one_clear_line(earlier: Path) -> None:
    """A real refusal by the kernel, met in the middle of writing."""
    before = earlier.read_bytes()
    program = (
        "import resource, signal, sys\n"
        "from pathlib import Path\n"
        "from tests.synthetic_run import write_synthetic_run\n"
        "from tnquench.errors import InputError\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (20_000, resource.RLIM_INFINITY))\n"
        "try:\n"
        "    write_synthetic_run(Path(sys.argv[1]), sites=6, times=3)\n"
        "except InputError as error:\n"
        "    sys.exit('; '.join(error.problems))\n"
    )
    done = subprocess.run(
        [sys.executable, "-B", "-c", program, str(earlier.parent)],
        cwd=Path(__file__).parent.parent,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1
    assert done.stderr == "cannot be written: File too large\n"
    assert earlier.read_bytes() == before
    assert [entry.name for entry in earlier.parent.iterdir()] == ["run.h5"]


def occupied(folder: Path) -> Path:
    target = folder / "taken"
    target.write_text("a file, no folder")
    return target


def below_a_file(folder: Path) -> Path:
    return occupied(folder) / "deeper"


def with_a_folder_named_as_the_file(folder: Path) -> Path:
    (folder / "run.h5").mkdir()
    return folder


def with_a_null_byte(folder: Path) -> Path:
    return folder / "null\0byte"


def with_too_long_a_name(folder: Path) -> Path:
    return folder / ("x" * 300)


def read_only(folder: Path) -> Path:
    if os.geteuid() == 0:
        pytest.skip("the superuser may write anywhere")
    folder.chmod(0o500)
    return folder


@pytest.mark.parametrize(
    "place",
    [
        occupied,
        below_a_file,
        with_a_folder_named_as_the_file,
        with_a_null_byte,
        with_too_long_a_name,
        read_only,
    ],
)
@pytest.mark.parametrize(
    "act", [require_writable, lambda folder: write_synthetic_run(folder, sites=6, times=3)]
)
def test_a_folder_that_cannot_be_written_is_refused(
    tmp_path: Path, place: Callable[[Path], Path], act: Callable[[Path], object]
) -> None:
    folder = place(tmp_path)
    before = sorted(tmp_path.rglob("*"))
    with pytest.raises(InputError) as caught:
        act(folder)
    assert len(caught.value.problems) == 1
    assert caught.value.problems[0].startswith("cannot be written: ")
    assert "\n" not in caught.value.problems[0]
    assert sorted(tmp_path.rglob("*")) == before


def test_require_writable_makes_the_folder_and_leaves_it_empty(tmp_path: Path) -> None:
    require_writable(tmp_path / "a" / "b")
    assert list((tmp_path / "a" / "b").iterdir()) == []


def replaced(pieces: dict[str, Any], group: str, **arrays: object) -> dict[str, Any]:
    """`pieces` with some arrays of one group replaced or added."""
    return pieces | {"groups": pieces["groups"] | {group: pieces["groups"].get(group, {}) | arrays}}


@pytest.mark.parametrize(
    ("group", "arrays", "message"),
    [
        ("quantum", {"pressure": np.zeros(TIMES)}, "no such variable of quantum: pressure"),
        ("weather", {"rain": np.zeros(TIMES)}, "no such group in a dataset: 'weather'"),
        ("budget/pressure", {"error": np.zeros(TIMES)}, "no such group"),
        ("hydrodynamics", {"energy_density": np.zeros(TIMES)}, "no such group"),
        ("companions/a/b", {}, "no such group"),
        ("quantum", {"total_energy": np.zeros(TIMES + 1)}, r"quantum/total_energy has shape \(6,\)"),
        ("quantum", {"total_energy": np.zeros((TIMES, 1))}, "must be float64 over"),
        ("quantum", {"total_energy": np.zeros(TIMES) * 1j}, "must be float64 over"),
        ("quantum", {"bond_dimension": np.ones((TIMES, SITES - 1))}, "must be int64 over"),
        ("companions/length", {"site_length": np.arange(5.0)}, r"companions/length/\w+ has shape \(5, 6\)"),
    ],
)
def test_what_the_layout_lacks_is_a_defect(
    tmp_path: Path, pieces: dict[str, Any], group: str, arrays: dict[str, object], message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        write_run(tmp_path, **replaced(pieces, group, **arrays))
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"coordinates": {"place": np.arange(3.0)}}, "no such coordinate: place"),
        ({"attributes": {"quantums": {"a": 1}}}, "attributes for a group without variables: 'quantums'"),
        ({"attributes": {"quantum": {"a": None}}}, "attribute a cannot be stored: None"),
        ({"provenance": {"events": "no JSON"}}, "attribute events must be JSON text"),
        ({"provenance": {"events": [object()]}}, "cannot be written as JSON"),
    ],
)
def test_wrong_coordinates_and_attributes_are_defects(
    tmp_path: Path, pieces: dict[str, Any], change: dict[str, Any], message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        write_run(tmp_path, **{key: pieces[key] | change.get(key, {}) for key in pieces})
    assert list(tmp_path.iterdir()) == []
