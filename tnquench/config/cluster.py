"""The section [cluster]: what a task may take and where it runs; plain words, never shell lines."""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable, Iterator, Mapping
from typing import Annotated, Any, ClassVar, Literal

from pydantic import Strict

from tnquench.config.chain_rules import Settings
from tnquench.config.notation import shown
from tnquench.config.setting import Section, setting
from tnquench.errors import InputError

#: Resources that may be asked of Slurm beside partition and account: what a job gets, never what it does.
RESOURCES = (
    "constraint", "exclude", "exclusive", "gres", "licenses", "nodelist", "qos", "reservation",
    "threads-per-core", "tmp",
)  # fmt: skip

#: Choices of engine and of what a task is, as the schema below has them.
ENGINES, TASKS = ("local", "dask", "slurm"), ("runs", "quenches")

#: In place of a scheduler's address: workers as jobs of Slurm.
SLURM_WORKERS = "slurm"

MOST_THREADS, MOST_JOBS = 1024, 100_000
LONGEST_SECONDS = 3.2e8
USUAL_NOTICE = 180.0
LARGEST_BYTES = 10**16

DURATION_FORMS = 'such as "2h", "1h30m", "00:30:00" or "1-12:00:00" (days-hours)'
MEMORY_FORMS = 'such as "8GB", "500MB" or "16GiB"'

_CLOCK = re.compile(r"(?:(\d{1,4})-)?(\d{1,6}):(\d{1,2}):(\d{1,2})", re.ASCII)
_UNITS = re.compile(
    r"(?:(\d{1,9}(?:\.\d{1,6})?)d)?(?:(\d{1,9}(?:\.\d{1,6})?)h)?(?:(\d{1,9}(?:\.\d{1,6})?)m(?:in)?)?"
    r"(?:(\d{1,9}(?:\.\d{1,6})?)s)?",
    re.ASCII,
)
_SECONDS = (86_400, 3_600, 60, 1)
_MEMORY = re.compile(r"(\d{1,12}(?:\.\d{1,6})?) ?([kmgt])(i?)b", re.IGNORECASE | re.ASCII)
_WORD = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.+-]{0,63}")
_RESOURCE_VALUE = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.,:+/&|*\[\]-]{0,199}")
_ADDRESS = re.compile(
    r"(?:tcp|tls)://(?:[A-Za-z0-9][A-Za-z0-9.-]{0,252}|\[[0-9A-Fa-f:]{2,45}\]):\d{1,5}", re.ASCII
)


class Cluster(Section):
    """Where the tasks of a sweep run and what each may take. Options of the command line come first.

    Time limit and memory count for a single run too. Nothing here changes a result.
    """

    EXAMPLE: ClassVar[str] = 'engine = "slurm"\nwalltime = "2h"\nmemory = "8GB"\nthreads = 2\njobs = 50'

    engine: Literal["local", "dask", "slurm"] = setting(
        "what carries the tasks out: processes on this machine, Dask's workers, or job arrays of Slurm",
        default="local",
    )
    tasks: Literal["runs", "quenches"] = setting(
        "what a task is: a whole run, or each of its quenches, after which its run is put together",
        default="runs",
    )
    walltime: str | None = setting(
        "longest time a task may take before it stops with a checkpoint, " + DURATION_FORMS,
        default=None,
        default_rule="none; for slurm the partition's own",
    )
    notice: str | None = setting(
        "how long before the end of the time limit Slurm asks a task to stop with a checkpoint",
        default=None,
        default_rule="3m, at most a quarter of walltime",
    )
    memory: str | None = setting(
        f"memory a task may take before it stops with a checkpoint, {MEMORY_FORMS}",
        default=None,
        default_rule="none; for slurm the partition's own",
    )
    threads: int | None = setting(
        "cores a task uses at once: for its quenches, then for the charges of their bonds",
        default=None,
        default_rule="the machine's cores divided among the jobs; 1 for dask and slurm",
        ge=1,
        le=MOST_THREADS,
    )
    jobs: int | None = setting(
        "tasks at once",
        default=None,
        default_rule="one a core; as many as Slurm allows",
        ge=1,
        le=MOST_JOBS,
    )
    scheduler: str | None = setting(
        'address of a running Dask scheduler, such as "tcp://node01:8786", or "slurm": workers that Dask '
        "asks of Slurm (dask-jobqueue)",
        default=None,
        default_rule="workers on this machine",
    )
    partition: str | None = setting("Slurm's partition", default=None, default_rule="the site's default")
    account: str | None = setting(
        "account that Slurm charges", default=None, default_rule="the site's default"
    )
    resources: Annotated[tuple[str, ...], Strict(strict=False)] = setting(
        'what else is asked of Slurm, such as ["constraint=icelake", "exclusive"]; names: '
        + ", ".join(RESOURCES),
        default=(),
    )
    requeue: bool = setting(
        "whether a job that stopped with a checkpoint goes back into Slurm's queue until it is done",
        default=True,
    )

    @property
    def walltime_seconds(self) -> float | None:
        """Time limit of a task in seconds."""
        return None if self.walltime is None else parse_duration(self.walltime)

    @property
    def notice_seconds(self) -> float:
        """Time between Slurm's notice and the end of the time limit, in seconds."""
        if self.notice is not None:
            return parse_duration(self.notice)
        return min(USUAL_NOTICE, (self.walltime_seconds or LONGEST_SECONDS) / 4.0)

    @property
    def memory_bytes(self) -> int | None:
        """Memory limit of a task in bytes."""
        return None if self.memory is None else parse_memory(self.memory)


def parse_duration(text: str) -> float:
    """Return the seconds that a text such as "2h", "1h30m", "00:30:00" or "1-12:00:00" means.

    Raises ValueError, with what is allowed, for anything else, nothing and more than ten years.
    """
    word = text.strip().lower()
    if clock := _CLOCK.fullmatch(word):
        parts = clock.groups()
        if int(parts[2]) >= 60 or int(parts[3]) >= 60:
            reason = "minutes and seconds of a clock time go to 59"
            raise ValueError(reason)
    elif word and (units := _UNITS.fullmatch(word)):
        parts = units.groups()
    else:
        reason = f"must be a time {DURATION_FORMS}"
        raise ValueError(reason)
    seconds = sum(float(part or 0) * size for part, size in zip(parts, _SECONDS, strict=True))
    if not 0.0 < seconds <= LONGEST_SECONDS:
        reason = "must be more than nothing and at most ten years"
        raise ValueError(reason)
    return seconds


def parse_memory(text: str) -> int:
    """Return the bytes that a text such as "8GB", "500MB" (powers of 1000) or "16GiB" (of 1024) means.

    Raises ValueError, with what is allowed, for anything else, less than 1 MB and more than 10 000 TB.
    """
    found = _MEMORY.fullmatch(text.strip())
    if not found:
        reason = f"must be a size {MEMORY_FORMS}"
        raise ValueError(reason)
    base = 1024 if found[3] else 1000
    power = 1 + "kmgt".index(found[2].lower())
    size = round(float(found[1]) * float(base**power))
    if not 10**6 <= size <= LARGEST_BYTES:
        reason = "must be from 1MB to 10000TB"
        raise ValueError(reason)
    return size


def cluster_conflicts(settings: Settings) -> Iterator[str]:
    """Yield one line per text of [cluster] that is not what it should be.

    settings : value or `Unusable` by dotted name, "section.key"
    """
    forms: dict[str, Callable[[str], object]] = {
        "walltime": parse_duration,
        "notice": parse_duration,
        "memory": parse_memory,
        "scheduler": parse_address,
        "partition": parse_word,
        "account": parse_word,
    }
    for key, parse in forms.items():
        if complaint := _complaint(parse, settings[f"cluster.{key}"]):
            yield f"[cluster] {key} = {shown(settings[f'cluster.{key}'])}: {complaint}"
    resources = settings["cluster.resources"]
    for index, resource in enumerate(resources if isinstance(resources, (list, tuple)) else ()):
        if complaint := _complaint(parse_resource, resource):
            yield f"[cluster] resources[{index}] = {shown(resource)}: {complaint}"
    yield from _short_notice(settings)


def parse_address(text: str) -> str:
    """Return the address of a Dask scheduler, or "slurm", unchanged; ValueError where it is neither."""
    if text != SLURM_WORKERS and not _ADDRESS.fullmatch(text):
        reason = 'must be the address of a Dask scheduler, such as "tcp://node01:8786", or "slurm"'
        raise ValueError(reason)
    return text


def parse_word(text: str) -> str:
    """Return the name of a partition or account unchanged; ValueError where it is no plain word."""
    if not _WORD.fullmatch(text):
        reason = "must be one plain word: letters, digits and _ . + -, a letter or digit first"
        raise ValueError(reason)
    return text


def parse_resource(text: str) -> str:
    """Return what is asked of Slurm, "name" or "name=value", unchanged; ValueError where it may not be."""
    name, sign, value = text.partition("=")
    if name not in RESOURCES:
        near = difflib.get_close_matches(name[:60], RESOURCES, n=1)
        hint = f'did you mean "{near[0]}"?' if near else f"allowed: {', '.join(RESOURCES)}"
        reason = f"no such resource; {hint}"
        raise ValueError(reason)
    if sign and not _RESOURCE_VALUE.fullmatch(value):
        reason = "its value must be one plain word without spaces or quotes"
        raise ValueError(reason)
    if not sign and name != "exclusive":
        reason = f'needs a value: "{name}=..."'
        raise ValueError(reason)
    return text


def _complaint(parse: Callable[[str], object], value: Any) -> str | None:
    if not isinstance(value, str):  # absent, or wrong by itself
        return None
    try:
        parse(value)
    except ValueError as refusal:
        return str(refusal)
    return None


def _short_notice(settings: Settings) -> Iterator[str]:
    texts = settings["cluster.walltime"], settings["cluster.notice"]
    if any(_complaint(parse_duration, text) for text in texts) or not all(
        isinstance(text, str) for text in texts
    ):
        return
    walltime, notice = (parse_duration(text) for text in texts)
    if notice >= walltime:
        yield f"[cluster] notice = {shown(texts[1])}: must be shorter than walltime = {shown(texts[0])}"


def with_options(cluster: Cluster, options: Mapping[str, Any], *, subject: str) -> Cluster:
    """Return the section with the options of a command line in place of its own settings.

    options : value by name of the setting; None leaves it
    subject : what messages call it
    Raises InputError with one line per option that cannot be used.
    """
    given = {key: value for key, value in options.items() if value is not None}
    changed = cluster.model_copy(update=given)
    settings = {f"cluster.{key}": value for key, value in changed.model_dump().items()}
    if problems := list(cluster_conflicts(settings)):
        raise InputError(subject, problems)
    return changed
