"""Carries out command lines for the tests, inside this process or in one of their own."""

from __future__ import annotations

import io
import os
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path

import pytest

from tests.config_cases import CONFIGS, MINIMAL, changed, toml
from tnquench import cli

ROOT = CONFIGS.parent


@dataclass(frozen=True)
class Answer:
    """What a command line did: exit code, standard output, standard error."""

    code: int
    out: str
    err: str

    @property
    def lines(self) -> list[str]:
        return self.err.splitlines()


def call(*words: object) -> Answer:
    """Carry out a command line in this process."""
    out, err = io.StringIO(), io.StringIO()
    with redirect_stdout(out), redirect_stderr(err), pytest.raises(SystemExit) as ended:
        cli.main([str(word) for word in words])
    return Answer(int(ended.value.code or 0), out.getvalue(), err.getvalue())


def start(*words: object) -> subprocess.Popen[str]:
    """Start a command line as a process of its own, at the head of a group of its own."""
    return subprocess.Popen(
        [sys.executable, "-c", "from tnquench.cli import main; main()", *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=ROOT,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        start_new_session=True,
    )


def config_file(folder: Path, **evolution: object) -> Path:
    """Write a config of 8 sites to `folder`; up to t = 0.5 unless told otherwise."""
    tables = changed("chain.sites", 8)
    tables["evolution"] = {**MINIMAL["evolution"], "until": 0.5, **evolution}
    file = folder / "tiny.toml"
    file.write_text(toml(tables))
    return file
