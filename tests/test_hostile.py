"""Malformed and malicious input ends in exit code 2 or 4 and a message; `python -m tests.benchmarks.hostile`
throws two thousand of these cases and more."""

from __future__ import annotations

import os
from pathlib import Path

import h5py
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from tests.hostile_arrays import MONSTERS, VALUES, image_of, plain_image
from tests.hostile_cases import Watched, candidate_tables, configs, mutated, watched
from tests.hostile_classic import classic_image, classic_monsters
from tests.hostile_datasets import told_otherwise
from tests.synthetic_run import write_synthetic_run
from tnquench.config.file_text import LARGEST_FILE as LARGEST_CONFIG
from tnquench.config.load import load_config
from tnquench.config.profile import TableProfile
from tnquench.dataset import storage
from tnquench.dataset.storage import LARGEST_FILE
from tnquench.errors import InputError
from tnquench.judge.candidate import open_candidate

GOOD = b"time,x,energy_density\n0.5,0.5,-0.1\n0.5,-0.5,-0.1\n1,1.5,-0.2\n"

few = settings(
    deadline=None, derandomize=True, database=None, phases=[Phase.generate],
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)  # fmt: skip


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a sound dataset, a good candidate, and what odd files point at."""
    folder = tmp_path_factory.mktemp("hostile")
    write_synthetic_run(folder / "base", sites=12, times=4)
    (folder / "good.csv").write_bytes(GOOD)
    os.mkfifo(folder / "pipe")
    with h5py.File(folder / "other.h5", "w") as file:
        file["a"] = VALUES
    return folder


def survived(found: Watched) -> None:
    assert not found.faults, found.faults


def read_or_refused(place: Path, name: str, content: bytes) -> None:
    """A candidate is opened, or refused in a few short printable lines."""
    (place / name).write_bytes(content)
    try:
        assert open_candidate(place / name).fields
    except InputError as error:
        refusal = error
    else:
        return
    assert all(0 < len(line) < 900 and line.isprintable() for line in refusal.problems)


def judged(place: Path, name: str, content: bytes) -> Watched:
    (place / name).write_bytes(content)
    return watched("judge", place / name, "--against", place / "base")


@settings(few, max_examples=80)
@given(configs())
def test_configs(place: Path, content: bytes) -> None:
    (place / "a.toml").write_bytes(content)
    survived(watched("check", place / "a.toml"))


@settings(few, max_examples=80)
@given(candidate_tables(GOOD))
def test_tables(place: Path, content: bytes) -> None:
    read_or_refused(place, "c.csv", content)


@settings(few, max_examples=4)
@given(mutated(plain_image()))
def test_spoiled_hdf5(place: Path, content: bytes) -> None:
    survived(judged(place, "c.h5", content))


@settings(few, max_examples=60)
@given(mutated(classic_image()))
def test_spoiled_classic_netcdf(place: Path, content: bytes) -> None:
    read_or_refused(place, "c.nc", content)


def test_heads_of_classic_netcdf_that_lie(place: Path) -> None:
    for content in classic_monsters():
        found = judged(place, "c.nc", content)
        survived(found)
        assert found.answer.code == 2


OUTSIDE = ("external storage", "external pipe", "virtual", "external link")


@pytest.mark.parametrize("kind", OUTSIDE)
def test_numbers_elsewhere_are_never_fetched(place: Path, monkeypatch: pytest.MonkeyPatch, kind: str) -> None:
    monkeypatch.chdir(place)
    found = judged(place, "c.h5", image_of(MONSTERS[kind], place))
    survived(found)
    assert found.answer.code == 2
    assert "energy_density" in found.answer.err


@pytest.mark.parametrize("kind", ["uneven texts", "external pipe", "virtual"])
def test_files_that_would_fill_the_memory_or_hang_are_damaged_datasets(
    place: Path, monkeypatch: pytest.MonkeyPatch, kind: str
) -> None:
    monkeypatch.chdir(place)
    (place / "d.h5").write_bytes(image_of(MONSTERS[kind], place))
    found = watched("check", place / "d.h5")
    survived(found)
    assert found.answer.code == 4
    assert "damaged HDF5 file" in found.answer.err


@settings(few, max_examples=4)
@given(st.data())
def test_datasets(place: Path, data: st.DataObject) -> None:
    """Whatever `check` finds fault with is refused by all that read datasets; what is sound is judged."""
    sound = (place / "base" / "run.h5").read_bytes()
    path = place / "d" / "run.h5"
    path.parent.mkdir(exist_ok=True)
    path.write_bytes(data.draw(told_otherwise(sound)))
    checked = watched("check", path)
    survived(checked)
    survived(watched("judge", place / "good.csv", "--against", path))
    if checked.answer.code == 4:
        for command in ("report", "refine"):
            found = watched(command, path)
            survived(found)
            assert found.answer.code == 2


@settings(few, max_examples=10)
@given(st.data())
def test_spoiled_bytes_of_datasets(place: Path, data: st.DataObject) -> None:
    sound = (place / "base" / "run.h5").read_bytes()
    (place / "d.h5").write_bytes(data.draw(mutated(sound)))
    survived(watched("check", place / "d.h5"))


def test_a_sealed_file_that_breaks_the_hdf5_library_is_refused(place: Path) -> None:
    """Anybody can write the seal: bytes that this process did not make are tried in another one first."""
    sound = (place / "base" / "run.h5").read_bytes()
    body = bytearray(sound[: -storage.SEAL_LENGTH])
    middle = len(body) // 3
    body[middle : middle + 4096] = bytes(4096)
    path = place / "d.h5"
    path.write_bytes(bytes(body) + storage._seal(bytes(body)))
    found = watched("check", path)
    survived(found)
    assert found.answer.code == 4


# Files that are none ----------------------------------------------------------------------------------------

NO_FILES = ("pipe", "/dev/zero", "base", "nowhere", "ring", "a\nb")
COMMANDS: tuple[tuple[str, ...], ...] = (
    ("check", "IT"),
    ("report", "IT"),
    ("refine", "IT"),
    ("run", "IT"),
    ("judge", "IT", "--against", "base"),
    ("judge", "good.csv", "--against", "IT"),
)


@pytest.mark.parametrize("name", NO_FILES)
@pytest.mark.parametrize("words", COMMANDS)
def test_what_is_no_file_is_refused_at_once(
    place: Path, monkeypatch: pytest.MonkeyPatch, name: str, words: tuple[str, ...]
) -> None:
    monkeypatch.chdir(place)
    (place / "ring").unlink(missing_ok=True)
    (place / "ring").symlink_to("ring")
    if name == "base" and words[0] != "run":
        name = "base/run.h5/deeper"  # the folder itself is a dataset indeed
    found = watched(*(name if word == "IT" else word for word in words))
    survived(found)
    assert found.answer.code == 2
    assert found.seconds < 20


def test_a_pipe_in_place_of_a_dataset_does_not_hang(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "run.h5")
    for command in ("check", "report", "refine"):
        found = watched(command, tmp_path)
        survived(found)
        assert "no regular file" in found.answer.err


def test_gigantic_files_are_refused_unread(place: Path) -> None:
    for name, size, words, said in (
        ("big.h5", LARGEST_FILE + 1, ("check",), "at most 4 GB are read"),
        ("big.toml", LARGEST_CONFIG + 1, ("check",), "larger than"),
        ("big.csv", 2**33, ("judge",), "allowed: 256 MB"),
    ):
        path = place / name
        with path.open("wb") as stream:
            stream.truncate(size)
        found = watched(words[0], path, *(("--against", place / "base") if words[0] == "judge" else ()))
        path.unlink()
        survived(found)
        assert found.answer.code == 2
        assert said in found.answer.err


TABLE_CONFIG = """\
chain = {{ sites = 4, anisotropy = 0.5 }}
start.beta = {{ shape = "table", file = "{file}" }}
evolution = {{ until = 1.0, every = 0.5, discarded_weight = 1e-8 }}
"""


def test_tables_outside_the_folder_are_read_only_where_the_user_allows_it(tmp_path: Path) -> None:
    folder = tmp_path / "configs"
    folder.mkdir()
    (tmp_path / "b.csv").write_text("1\n2\n3\n")
    (folder / "link.csv").symlink_to(tmp_path / "b.csv")
    for file in ("../b.csv", str(tmp_path / "b.csv"), "link.csv", "../configs/../b.csv"):
        (folder / "a.toml").write_text(TABLE_CONFIG.format(file=file))
        with pytest.raises(InputError, match="lies outside the folder of the config; must be in it or below"):
            load_config(folder / "a.toml")
        beta = load_config(folder / "a.toml", allow_outside=True).start.beta
        assert isinstance(beta, TableProfile)
        assert beta.values == (1.0, 2.0, 3.0)


def test_what_the_user_allows_must_still_be_a_file(place: Path) -> None:
    for file, said in (
        ("/dev/zero", "is not a regular file"),
        (str(place / "pipe"), "is not a regular file"),
        ("/etc", "is a folder, not a file"),
        ("/proc/self/mem", "cannot be read|not a regular file"),
        ("/etc/passwd", "columns|is not a number"),
    ):
        (place / "t.toml").write_text(TABLE_CONFIG.format(file=file))
        with pytest.raises(InputError, match=said):
            load_config(place / "t.toml", allow_outside=True)
