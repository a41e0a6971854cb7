"""The program's own exceptions, one exit code each; only `cli.py` turns them into an exit."""

from __future__ import annotations

from collections.abc import Sequence


class TnquenchError(Exception):
    """Base of every failure the program foresees."""

    exit_code = 1


class InputError(TnquenchError):
    """The user's input cannot be used; carries one line per problem (where, found, allowed, what to do).

    consequence : what did not happen because of it, said in the heading; nothing where that is plain
    """

    exit_code = 2

    def __init__(
        self, subject: str, problems: Sequence[str], *, consequence: str = "nothing was run"
    ) -> None:
        subject = "".join(letter if letter.isprintable() else repr(letter)[1:-1] for letter in subject)
        self.subject = subject
        self.problems = tuple(problems)
        count = f"{len(self.problems)} problem{'s' if len(self.problems) != 1 else ''}"
        lines = "\n".join(f"  {problem}" for problem in self.problems)
        heading = f"{subject}: {count}, {consequence}" if consequence else f"{subject}: {count}"
        super().__init__(f"{heading}\n{lines}")


class VerdictNegative(TnquenchError):  # noqa: N818 - a verdict, not a fault
    """A check was carried out and its answer is no; carries one line per finding."""

    exit_code = 4

    def __init__(self, subject: str, findings: Sequence[str]) -> None:
        self.subject = subject
        self.findings = tuple(findings)
        lines = "\n".join(f"  {finding}" for finding in self.findings)
        super().__init__(f"{subject}: verdict negative\n{lines}")


class ConvergenceError(TnquenchError):
    """An iteration did not converge; carries its residual and the best value reached."""

    def __init__(self, what: str, *, residual: float, best: object = None) -> None:
        self.residual = residual
        self.best = best
        super().__init__(f"{what} did not converge: residual {residual:.2e}")


class StateError(TnquenchError):
    """The chain state lost its norm or holds values that are not numbers; carries a diagnosis."""


class Stopped(TnquenchError):  # noqa: N818 - a pause, not a fault
    """A run ended before its time and can go on; carries why."""

    exit_code = 3

    def __init__(self, why: str) -> None:
        self.why = why
        super().__init__(why)
