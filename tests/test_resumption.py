"""A quench that was stopped anywhere goes on bit for bit as if it had not been; so does a whole run."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, fields, replace
from pathlib import Path

import numpy as np
import pytest

from tests.budget_cases import free_quench
from tests.command_line import call, config_file
from tnquench import open_run
from tnquench import run as run_module
from tnquench.budget.companions import SHORT, companion_quenches, loosened
from tnquench.checkpoints import CHECKPOINTS, QuenchKeeper, Store, fingerprint, open_store
from tnquench.config.load import load_config
from tnquench.dataset.reader import Run
from tnquench.errors import InputError, StateError, Stopped
from tnquench.evolution import layers, real_time
from tnquench.evolution.chain_state import ChainState
from tnquench.model.chain import start_terms
from tnquench.model.fermions import hubbard_chain
from tnquench.observables.quench import QuantumRecord, Quench, simulate, start_of_quench
from tnquench.quantum_of import MAIN, SILENT, Watch, simulate_all
from tnquench.run import Continuation
from tnquench.stopping import Limits, Stop


@dataclass
class StopAfter(Stop):
    """Asks for the end after so many layers."""

    layers: int
    count: int = field(default=0)

    def __post_init__(self) -> None:
        super().__init__()

    def reason(self, **_: float) -> str:
        self.count += 1
        return "enough" if self.count >= self.layers else ""


def in_pieces(quench: Quench, store: Store, *, layers: int) -> tuple[QuantumRecord, int]:
    """The record of a quench that is stopped after every so many layers, and how often it was."""
    for stops in range(1000):
        try:
            return simulate(quench, keeper=QuenchKeeper(store, MAIN, quench, StopAfter(layers))), stops
        except Stopped:
            continue
    raise AssertionError


def assert_same(first: QuantumRecord, second: QuantumRecord) -> None:
    for entry in fields(QuantumRecord):
        if entry.name in ("seconds", "cpu_seconds"):
            continue
        assert_equal(getattr(first, entry.name), getattr(second, entry.name), entry.name)


def assert_equal(first: object, second: object, name: str) -> None:
    if isinstance(first, ChainState):
        assert isinstance(second, ChainState)
        assert first.centre == second.centre
        for one, other in zip(first.tensors, second.tensors, strict=True):
            np.testing.assert_array_equal(one, other, err_msg=name)
    elif isinstance(first, dict):
        assert isinstance(second, dict)
        assert first.keys() == second.keys()
        for key in first:
            assert_equal(first[key], second[key], f"{name} {key}")
    elif hasattr(first, "__dataclass_fields__"):
        assert_equal(vars(first), vars(second), name)
    else:
        np.testing.assert_array_equal(first, second, err_msg=name)


def hubbard_quench() -> Quench:
    chain = hubbard_chain(sites=4, repulsion=4.0)
    return replace(
        free_quench(4),
        chain=chain,
        start_terms=start_terms(chain, beta=[0.3, 0.5, 0.8]),
        samples=2,
        discarded_weight=1e-7,
        preparation_weight=1e-11,
    )


QUENCHES = {
    "weights decide": free_quench(8),
    "the floor decides": replace(free_quench(10), bond_floor=24, discarded_weight=1e-8),
    "svd": replace(free_quench(8), cutting="svd", trotter_order=2),
    "hubbard": hubbard_quench(),
}


@pytest.mark.parametrize("name", QUENCHES)
@pytest.mark.parametrize("layers", [4, 29])
def test_a_quench_in_pieces_is_the_whole_bit_for_bit(name: str, layers: int, tmp_path: Path) -> None:
    quench = replace(QUENCHES[name], samples=2)
    found, stops = in_pieces(quench, Store(tmp_path), layers=layers)
    assert stops > 0
    assert_same(simulate(quench), found)


def test_a_finished_quench_is_extended_bit_for_bit(tmp_path: Path) -> None:
    quench, store = free_quench(8), Store(tmp_path)
    shorter = replace(quench, samples=2)
    assert fingerprint(shorter) == fingerprint(quench)
    in_pieces(shorter, store, layers=10**9)
    assert store.standing(MAIN, shorter) == "finished before"
    assert store.standing(MAIN, quench) == "goes on from t = 1"
    found, stops = in_pieces(quench, store, layers=10**9)
    assert stops == 0
    assert_same(simulate(quench), found)


def test_another_quench_has_another_fingerprint() -> None:
    quench = free_quench(8)
    others = [
        replace(quench, steps=4),
        replace(quench, every=0.25),
        replace(quench, trotter_order=2),
        replace(quench, cutting="gram"),
        replace(quench, start_terms=free_quench(10).start_terms),
        loosened(quench),
        *(
            replace(quench, **{name: 2 * getattr(quench, name)})
            for name in (
                "discarded_weight",
                "bond_floor",
                "bond_ceiling",
                "preparation_weight",
                "preparation_distance",
            )
        ),
    ]
    assert len({fingerprint(each) for each in (quench, *others)}) == len(others) + 1


def test_companions_with_the_start_of_the_main_run_are_those_with_their_own() -> None:
    main = replace(free_quench(8), samples=1)
    start = start_of_quench(main)
    before = [tensor.copy() for tensor in start.state.tensors]
    for companion in companion_quenches(main, shorter=None).values():
        assert start.serves(companion.bond_ceiling)
        assert_same(simulate(companion), simulate(companion, start=start))
    for tensor, copy in zip(start.state.tensors, before, strict=True):
        np.testing.assert_array_equal(tensor, copy, err_msg="a shared start is never changed")
    assert not start.serves(int(start.state.bond_dimensions.max()) - 1)


def test_a_start_bound_by_the_ceiling_is_not_shared() -> None:
    main = replace(free_quench(8), samples=1, bond_ceiling=4)
    assert not start_of_quench(main).serves(4)


def test_checkpoints_take_a_small_share_of_the_time(tmp_path: Path) -> None:
    keeper = QuenchKeeper(Store(tmp_path, interval=0.0), MAIN, free_quench(8), Stop())
    keeper.save_seconds = 0.03
    saved = []
    keeper._save = lambda *_, **__: saved.append(time.monotonic())  # type: ignore[method-assign]
    keeper.saved = time.monotonic() - 0.9
    keeper.after_layer({"stage": "evolution", "time": 0.0}, dict)
    assert not saved, "0.03 s after 0.9 s would be more than 3 %"
    keeper.saved = time.monotonic() - 1.1
    keeper.after_layer({"stage": "evolution", "time": 0.0}, dict)
    assert len(saved) == 1


def test_the_time_limit_leaves_room_for_a_layer_and_a_checkpoint() -> None:
    stop = Stop(Limits(seconds=10.0))
    assert stop.reason(layer_seconds=1.0, checkpoint_seconds=1.0) == ""
    assert stop.reason(layer_seconds=4.0, checkpoint_seconds=1.0) == "the time limit is near"


def test_a_changed_norm_is_diagnosed(monkeypatch: pytest.MonkeyPatch) -> None:
    layer = layers.apply_layer

    def drifting(state: ChainState, *words: object) -> None:
        state.tensors[state.centre] = state.tensors[state.centre] * (1.0 + 1e-6)
        layer(state, *words)  # type: ignore[arg-type]

    monkeypatch.setattr(real_time, "apply_layer", drifting)
    with pytest.raises(StateError, match=r"changed the logarithm of the state's norm by 1\.0e-06 at t = 0\."):
        simulate(replace(free_quench(6), samples=1))


# --- whole runs


@pytest.fixture
def no_report(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(run_module, "write_report", lambda _folder: None)  # seconds, and not in question


def assert_same_datasets(first: Run, second: Run) -> None:
    groups = [(first.quantum, second.quantum)]
    groups += [(first.hydrodynamics[name], second.hydrodynamics[name]) for name in first.hydrodynamics]
    groups += [(first.budget[name], second.budget[name]) for name in first.budget]
    groups += [(first.companions[name], second.companions[name]) for name in first.companions]
    for one, other in groups:
        assert set(one) == set(other)
        for name in one:
            np.testing.assert_array_equal(one[name], other[name], err_msg=str(name))


@contextmanager
def stopped_in(stage: str) -> Iterator[tuple[Watch, Stop]]:
    """A watch whose stop is asked as soon as a stage of this name has made a layer."""
    stop, reached = Stop(), [False]

    def begin(name: str, _quench: Quench | None) -> None:
        reached[0] = name.startswith(stage)

    def progress(_progress: object) -> None:
        if reached[0]:
            stop.ask("asked")

    yield Watch(stage=begin, progress=progress), stop


@pytest.mark.usefixtures("no_report")
def test_a_run_stopped_at_every_stage_gives_the_same_dataset(tmp_path: Path) -> None:
    config = config_file(tmp_path)
    whole = open_run(run_module.run(config, into=tmp_path / "whole"))
    for stage in ("main run", "companion weight_30", "companion step_2", "companion length"):
        with stopped_in(stage) as (watch, stop), pytest.raises(Stopped, match="asked"):
            run_module.run(config, into=tmp_path / "parts", watch=watch, continuation=Continuation(stop=stop))
        assert not (tmp_path / "parts" / "run.h5").exists()
    parts = open_run(run_module.run(config, into=tmp_path / "parts"))
    assert_same_datasets(whole, parts)
    kept = sorted(file.name.split("-")[0] for file in (tmp_path / "parts" / CHECKPOINTS).glob("*.h5"))
    assert kept == sorted([MAIN, *whole.companions]), "starts and older generations are gone"


@pytest.mark.usefixtures("no_report")
def test_an_extended_run_is_the_longer_run(tmp_path: Path) -> None:
    short, long = config_file(tmp_path), tmp_path / "long.toml"
    long.write_text(short.read_text().replace("until = 0.5", "until = 1.0"))
    run_module.run(short, into=tmp_path / "grown")
    grown = open_run(run_module.run(long, into=tmp_path / "grown"))
    assert grown.provenance["config_toml"].count("until = 1.0") == 1
    assert_same_datasets(open_run(run_module.run(long, into=tmp_path / "long")), grown)
    answer = call("run", short, "--into", tmp_path / "grown", "--threads", 1)
    assert answer.code == 2
    assert "until = 0.5: main has been at t = 1 already; a run can grow, not shrink" in answer.err
    assert open_run(tmp_path / "grown").provenance["digest"] == grown.provenance["digest"]


@pytest.mark.usefixtures("no_report")
def test_quenches_carried_out_alone_are_put_together(tmp_path: Path) -> None:
    config = config_file(tmp_path)
    whole = open_run(run_module.run(config, into=tmp_path / "whole"))
    for name in (SHORT, MAIN, "weight_30", "step_2"):
        assert call("run", config, "--into", tmp_path / "parts", "--only", name).code == 0
        assert not (tmp_path / "parts" / "run.h5").exists()
    stages = []
    watch = Watch(stage=lambda name, _quench: stages.append(name), progress=SILENT.progress)
    assert_same_datasets(whole, open_run(run_module.run(config, into=tmp_path / "parts", watch=watch)))
    assert sum(stage.endswith("finished before") for stage in stages) == 4
    answer = call("run", config, "--into", tmp_path / "parts", "--only", "mian")
    assert answer.code == 2
    assert '--only "mian": no such quench; there are main, weight_30,' in answer.err


def test_another_config_is_refused_with_the_keys_that_differ(tmp_path: Path) -> None:
    config = load_config(config_file(tmp_path))
    store = open_store(tmp_path / "run", config, interval=None, fresh=False)
    (store.folder / "main-0.h5").touch()
    evolution = config.evolution.model_copy(update={"time_step": 0.125, "until": 7.0, "every": 0.25})
    other = config.model_copy(update={"evolution": evolution, "title": "Another title"})
    with pytest.raises(InputError) as refused:
        open_store(tmp_path / "run", other, interval=None, fresh=False)
    assert len(refused.value.problems) == 3
    assert refused.value.problems[0].startswith("evolution.every: 0.25 now, ")
    assert refused.value.problems[1].startswith("evolution.time_step: 0.125 now, ")
    assert "--fresh" in refused.value.problems[2]
    open_store(tmp_path / "run", other, interval=None, fresh=True)
    assert not list(store.folder.glob("*.h5"))


def test_processes_stop_with_checkpoints_and_go_on(tmp_path: Path) -> None:
    main, store = free_quench(10), Store(tmp_path)
    runs = companion_quenches(main, shorter=free_quench(8))
    stop = Stop()

    def late(_progress: object) -> None:
        stop.ask("asked")

    with pytest.raises(Stopped):
        simulate_all(
            main,
            runs,
            threads=2,
            watch=Watch(stage=SILENT.stage, progress=late),
            store=store,
            stop=stop,
        )
    side = simulate_all(main, runs, threads=2, watch=SILENT, store=store, stop=Stop())
    assert_same(replace(simulate(main), last_state=None), side.main)
    for name, quench in runs.items():
        record = side.companions[name]
        assert isinstance(record, QuantumRecord)
        assert_same(replace(simulate(quench), last_state=None), record)


def test_a_start_is_shared_only_where_no_ceiling_would_have_bound_on_the_way() -> None:
    """Attempts that are thrown away may need more than the one that is kept."""
    start = start_of_quench(replace(free_quench(8), samples=1))
    on_the_way = replace(start, facts=replace(start.facts, largest_bond=99))
    assert on_the_way.serves(99)
    assert not on_the_way.serves(98)
    assert not replace(start, facts=replace(start.facts, bound=True)).serves(10**6)
