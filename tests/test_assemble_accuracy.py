"""Configs that ask for an accuracy: met and said to be, or missed and admitted."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.assemble_cases import CASES, FOUR, SHARP_BETA, SHARP_FIELD, config_of, exact_of, text_of
from tnquench.config.schema import Config
from tnquench.dataset.reader import open_run
from tnquench.observables.quench import Quench
from tnquench.outcome import QuantumSide
from tnquench.quantum_of import SILENT, Watch, quantum_side
from tnquench.run import run


def test_an_accuracy_is_met_and_said_to_be(tmp_path: Path) -> None:
    """The true error of a whole run stays below the accuracy that its config asks for."""
    case = CASES["sharp, bond at the joint"]
    file = tmp_path / "accurate.toml"
    file.write_text(
        text_of(
            beta=case.beta,
            beta_field=case.beta_field,
            sites=case.sites,
            anisotropy=0.5,
            evolution="until = 1.0\nevery = 0.5\naccuracy = 1e-4",
            joint="coupled",
            levels="[]",
        ),
        encoding="utf-8",
    )
    stages: list[str] = []
    watch = Watch(stage=lambda name, _: stages.append(name), progress=SILENT.progress)
    result = open_run(run(file, into=tmp_path / "result", watch=watch))
    assert stages.count("main run") == 1, "nothing is repeated once the accuracy is met"
    exact = exact_of(case, np.array([0.0, 0.5, 1.0]))
    for name in FOUR:
        assert np.abs(result.quantum[name].to_numpy() - exact[name]).max() <= 1e-4, name
    kinds = [event["kind"] for event in result.provenance["events"]]
    assert kinds.count("accuracy_reached") == 1
    assert "accuracy_missed" not in kinds
    settings = result.provenance["main_run"]
    event = next(event for event in result.provenance["events"] if event["kind"] == "accuracy_reached")
    assert f"weight {settings['discarded_weight']:.1e}" in event["detail"]
    assert f"time step {settings['time_step']:.3g}" in event["detail"]
    assert "1.0e-04 asked" in event["detail"]


def missed(config: Config) -> tuple[QuantumSide, list[Quench]]:
    """The quantum side of a config whose accuracy is out of reach, and every main quench that was tried."""
    mains: list[Quench] = []

    def stage(name: str, quench: Quench | None) -> None:
        if name == "main run":
            assert quench is not None
            mains.append(quench)

    side = quantum_side(config, threads=1, watch=Watch(stage=stage, progress=SILENT.progress))
    assert side.quench == mains[-1]
    assert [event["kind"] for event in side.events] == ["accuracy_missed"]
    chosen = f"weight {mains[-1].discarded_weight:.1e}, time step {mains[-1].time_step:.3g}"
    assert chosen in str(side.events[0]["detail"])
    return side, mains


def hard_config(extra: str = "") -> Config:
    return config_of(
        beta=SHARP_BETA,
        beta_field=SHARP_FIELD,
        evolution=f"until = 1.0\nevery = 0.5\naccuracy = 1e-9\n{extra}",
        levels="[]",
    )


def test_a_step_held_too_long_is_admitted_at_once() -> None:
    """No weight mends a step that the config holds: nothing is repeated, and the event names the step."""
    side, mains = missed(hard_config("time_step = 0.25"))
    assert [main.time_step for main in mains] == [0.25]
    assert "mostly time step" in str(side.events[0]["detail"])


@pytest.mark.parametrize(
    ("pilots", "weights", "steps"),
    [
        ((1e-6, 0.05), (1e-6, 1e-7, 1e-8), (0.05, 0.05, 0.05)),
        ((1e-15, 0.25), (1e-15, 1e-15, 1e-15), (0.25, 0.125, 0.0625)),
    ],
    ids=["weight", "step"],
)
def test_repeats_mend_the_largest_source(
    monkeypatch: pytest.MonkeyPatch,
    pilots: tuple[float, float],
    weights: tuple[float, ...],
    steps: tuple[float, ...],
) -> None:
    """Pilot runs that chose badly: each repeat cuts less, or steps less, and the last one is admitted."""
    monkeypatch.setattr("tnquench.quantum_of.choose_settings", lambda *_, **__: pilots)
    _, mains = missed(hard_config())
    assert [main.discarded_weight for main in mains] == pytest.approx(weights)
    assert [main.time_step for main in mains] == pytest.approx(steps)
