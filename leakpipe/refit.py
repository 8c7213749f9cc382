"""Refits: which results are new or stale, made one after the other, safely at any moment.

Identity is content: the hashes of the recordings a result rests on, the resolved settings, the
layout and the version of results. A result folder carries its identity and is renamed into place
when it is whole; run log, history and metrics follow and can be written again without doubling
anything. So a kill loses at most the result that was being made, and the next start makes it again.

Nothing numerical is imported unless there is something to do.
"""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from leakpipe.errors import LeakpipeError, RecordingError
from leakpipe.history.files import locked
from leakpipe.history.inputs import Inputs, Ledger, content_hash, digest_of, look, recordings_in
from leakpipe.history.jobs import Job, Pass, Plan, Planner, Runner, Tools
from leakpipe.history.publish import publish, set_aside, store_of, unpublished, write_metrics
from leakpipe.history.results import (
    RESULT_VERSION,
    Finished,
    Key,
    clear_leftovers,
    finished,
    key_of,
    note_identity,
    place_for,
    read_summary,
)

if TYPE_CHECKING:
    from leakpipe.config.models import Config
    from leakpipe.findings import Finding
    from leakpipe.progress import Reporter

__all__ = [
    "Job",
    "Pass",
    "Plan",
    "Planner",
    "Runner",
    "StopSwitch",
    "Tools",
    "refit",
    "repeat",
    "standard_tools",
    "stop_on_signals",
]

MOST_TRIES = 3
"""Tries of a result that fails unexpectedly before it is left until something changes (ours)."""
NOT_IN_RESULTS = ("history", "compute", "results", "run_log", "metrics")
"""Sections of the config that change no number of a result."""
LAYOUT_NAMES = ("layout.yaml", "layout.yml")


class Stopped(BaseException):
    """A signal asked to stop while a result was being made; the unfinished folder is removed."""


class StopSwitch(threading.Event):
    """Set by SIGTERM and SIGINT; `working` is true while an interruption loses only work."""

    working = False


@contextmanager
def stop_on_signals() -> Iterator[StopSwitch]:
    """Give a switch that the first SIGTERM or SIGINT sets; a result being made is given up."""
    switch = StopSwitch()

    def ask(_number: int, _frame: Any) -> None:
        switch.set()
        if switch.working:
            switch.working = False
            raise Stopped

    before = {number: signal.signal(number, ask) for number in (signal.SIGTERM, signal.SIGINT)}
    try:
        yield switch
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def standard_tools() -> Tools:
    """Return the tools that make real results; the pipeline is imported when there is work."""

    def plan(config: Config, complete: Sequence[Path], waiting: Sequence[Path]) -> Plan:
        from leakpipe.history.planning import plan_recordings

        return plan_recordings(config, complete, waiting)

    def run(
        job: Job, folder: Path, config: Config, findings: Sequence[Finding], reporter: Reporter
    ) -> None:
        from leakpipe.pipeline import run_job

        run_job(job, folder, config, findings, reporter)

    def closing(config: Config) -> None:
        from leakpipe.pipeline import close_pass

        close_pass(config)

    return Tools(plan, run, closing)


def refit(
    config: Config,
    tools: Tools,
    reporter: Reporter,
    *,
    clock: Callable[[], float] = time.time,
    stop: StopSwitch | None = None,
) -> Pass:
    """Make every result that is new or stale, oldest first.

    Raises
    ------
    ConfigError, LayoutError
        The config or the layout cannot be used.
    RecordingError
        The folder of recordings does not exist.
    """
    if not config.recordings.folder.is_dir():
        raise RecordingError(f"{config.recordings.folder}  is not a folder of recordings")
    with locked(config.results) as mine:
        if not mine:
            return Pass(busy=True)
        return _Refit(config, tools, reporter, clock(), stop or StopSwitch()).through()


def repeat(
    one_pass: Callable[[], Pass],
    every_seconds: float,
    stop: threading.Event,
    say: Callable[[str], None],
) -> Pass:
    """Run passes until asked to stop; an error of one pass is said and the next one tries again."""
    last = Pass()
    while not stop.is_set():
        start = time.monotonic()
        try:
            last = one_pass()
            if news := last.news():
                say(news)
        except LeakpipeError as error:
            say(str(error))
        stop.wait(max(every_seconds - (time.monotonic() - start), 0.0))
    return last


def settings_digest(config: Config) -> str:
    """Return the hash of all settings that results rest on, the content of the layout included."""
    settings = config.model_dump(mode="json", exclude=set(NOT_IN_RESULTS))
    for section, names in (("recordings", ("folder", "patterns")), ("code", ("layout",))):
        for name in names:
            settings[section].pop(name, None)
    named = [] if config.code.layout is None else [config.code.layout]
    usual = [config.recordings.folder / name for name in LAYOUT_NAMES]
    layouts = [content_hash(path) for path in (*named, *usual) if path.is_file()]
    return digest_of([RESULT_VERSION, settings, layouts[:1]])


class _Refit:
    """One pass under the lock."""

    def __init__(
        self, config: Config, tools: Tools, reporter: Reporter, now: float, stop: StopSwitch
    ) -> None:
        self.config, self.tools, self.reporter = config, tools, reporter
        self.now, self.stop = now, stop
        self.results = config.results
        self.store = store_of(self.results)
        self.settings = settings_digest(config)
        self.ledger = Ledger.load(self.results)
        failures = (text for _, text in self.ledger.failures.values())
        self.told = Pass(said_before=(*self.ledger.problems, *failures))

    def through(self) -> Pass:
        """Do the pass."""
        clear_leftovers(self.results)
        if said := set_aside(self.store):
            self.told.problems.append(said)
        for one in unpublished(finished(self.results), self.store):
            self._publish(one.folder)
        paths = recordings_in(self.config.recordings.folder, self.config.recordings.patterns)
        quiet = self.config.history.quiet_seconds
        inputs = look(paths, self.ledger, quiet_seconds=quiet, now=self.now)
        done = finished(self.results)
        if not inputs.waiting and self.ledger.settled == self._state(inputs, done):
            self.told.fresh = len(done)
            self.told.problems += self.ledger.problems
            self.told.failures += [text for _, text in self.ledger.failures.values()]
            return self.told
        self.ledger.settled = ""
        # A kill from here on does not cost the hashes just made.
        self.ledger.save(self.results)
        self._work(inputs, {one.key: one for one in done})
        self._close(inputs)
        return self.told

    def _work(self, inputs: Inputs, done: dict[Key, Finished]) -> None:
        plan = self._plan(inputs)
        postponed = self._postponed(plan, inputs, done)
        todo = []
        for job in sorted(plan.jobs, key=lambda job: (job.acquired_at, job.key)):
            if job.key in postponed:
                continue
            if self._is_fresh(job, inputs, done):
                self.told.fresh += 1
            else:
                todo.append(job)
        for number, job in enumerate(todo):
            if self.stop.is_set():
                self.told.stopped = True
                break
            last = number == len(todo) - 1
            try:
                self._make(job, inputs, self._told_to(job, plan, inputs, newest=last))
            except Stopped:
                self.told.stopped = True
                break
        self.told.waiting += [path.name for path in inputs.waiting]
        self.told.waiting += ["-".join(key) for key in sorted(postponed)]
        problems = [*inputs.problems, *plan.problems.values(), *self._bad(inputs).values()]
        self.told.problems += dict.fromkeys(problems)
        failures = {self._identity(job, inputs) for job in plan.jobs} & set(self.ledger.failures)
        self.ledger.failures = {key: self.ledger.failures[key] for key in sorted(failures)}
        self.told.failures += [text for _, text in self.ledger.failures.values()]

    def _close(self, inputs: Inputs) -> None:
        done = finished(self.results)
        if self.config.metrics is not None and done:
            write_metrics(self.config.metrics, done)
        if self.tools.closing is not None and done:
            self.tools.closing(self.config)
        self.ledger.problems = tuple(self.told.problems)
        again = any(tries < MOST_TRIES for tries, _ in self.ledger.failures.values())
        if not (self.told.waiting or self.told.stopped or again):
            self.ledger.settled = self._state(inputs, done)
        self.ledger.save(self.results)

    def _state(self, inputs: Inputs, done: Sequence[Finished]) -> str:
        """Return the digest of everything that decides whether there is something to do."""
        hashes = {self._relative(path): sha for path, sha in inputs.hashes.items()}
        results = [(one.folder.name, one.identity) for one in done]
        goals = [self.config.run_log, self.config.metrics, inputs.problems]
        return digest_of([hashes, self.settings, results, goals])

    def _plan(self, inputs: Inputs) -> Plan:
        bad = self._bad(inputs)
        complete = [path for path in inputs.hashes if path not in bad]
        return self.tools.plan(self.config, complete, inputs.waiting)

    def _bad(self, inputs: Inputs) -> dict[Path, str]:
        known = self.ledger.bad
        return {path: known[sha] for path, sha in inputs.hashes.items() if sha in known}

    def _postponed(self, plan: Plan, inputs: Inputs, done: dict[Key, Finished]) -> set[Key]:
        """Results that a recording still being written belongs to, or belonged to before."""
        waiting = {self._relative(path) for path in inputs.waiting}
        before = {key for key, one in done.items() if waiting & set(one.inputs)}
        return before | set(plan.waiting)

    def _is_fresh(self, job: Job, inputs: Inputs, done: dict[Key, Finished]) -> bool:
        identity = self._identity(job, inputs)
        if job.key in done and done[job.key].identity == identity:
            return True
        tries, _ = self.ledger.failures.get(identity, (0, ""))
        return tries >= MOST_TRIES

    def _identity(self, job: Job, inputs: Inputs) -> str:
        # The name and not the folder: moving all recordings elsewhere makes nothing stale.
        content = sorted((path.name, inputs.hashes[path]) for path in job.inputs)
        return digest_of([self.settings, job.key, content])

    def _relative(self, path: Path) -> str:
        return str(path.relative_to(self.config.recordings.folder))

    def _told_to(self, job: Job, plan: Plan, inputs: Inputs, *, newest: bool) -> dict[Path, str]:
        """Return the damaged recordings that this job's result has to tell of.

        A damaged recording does not say which epoch it is of. It is told to those whose
        recordings lie in the same folder, or, where all lie together, once to the newest one.
        """
        before = {sha for one in finished(self.results) if one.key != job.key for sha in one.told}
        found = {}
        for path, sentence in plan.problems.items():
            beside = [one for one in plan.jobs if path.parent in {p.parent for p in one.inputs}]
            everywhere = len(beside) in (0, len(plan.jobs))
            once = newest and inputs.hashes.get(path) not in before
            if once if everywhere else job in beside:
                found[path] = sentence
        return found

    def _make(self, job: Job, inputs: Inputs, left_out: dict[Path, str]) -> None:
        """Make one result, without the recordings that turn out damaged on the way."""
        while True:
            identity = self._identity(job, inputs)
            try:
                folder = self._filled(job, identity, inputs, left_out)
            except RecordingError as error:
                damaged = [path for path in job.inputs if str(path) in str(error)]
                for path in damaged:
                    self.ledger.bad[inputs.hashes[path]] = str(error)
                    left_out[path] = str(error)
                self.ledger.save(self.results)
                again = [one for one in self._plan(inputs).jobs if one.key == job.key]
                if damaged and again:
                    job = again[0]
                    continue
                self._failed(job, identity, str(error), MOST_TRIES)
            except Exception as error:
                # Whatever it was, the other epochs must still be done tonight.
                tries, _ = self.ledger.failures.get(identity, (0, ""))
                self._failed(job, identity, f"{type(error).__name__}: {error}", tries + 1)
            else:
                self.told.made.append(folder)
                self.ledger.failures.pop(identity, None)
                self._publish(folder)
            return

    def _failed(self, job: Job, identity: str, reason: str, tries: int) -> None:
        left = "not tried again until something changes" if tries >= MOST_TRIES else "tried again"
        text = f"{'-'.join(job.key)}: {reason} ({left})"
        self.ledger.failures[identity] = (tries, text)
        self.ledger.save(self.results)

    def _filled(self, job: Job, identity: str, inputs: Inputs, left_out: dict[Path, str]) -> Path:
        from leakpipe.result import replacing

        taken = {one.folder: one.key for one in finished(self.results)}
        place = place_for(self.results, job.key, taken)
        findings = [self._unreadable(path, text) for path, text in sorted(left_out.items())]
        with replacing(place) as folder:
            self.stop.working = True
            try:
                if self.stop.is_set():
                    raise Stopped
                self.tools.run(job, folder, self.config, findings, self.reporter)
            finally:
                self.stop.working = False
            summary = read_summary(folder)
            if summary is None or key_of(summary) != job.key:
                raise LeakpipeError(f"the result of {'-'.join(job.key)} has no summary of its own")
            hashes = {self._relative(path): inputs.hashes[path] for path in job.inputs}
            told = tuple(inputs.hashes[path] for path in left_out if path in inputs.hashes)
            made_at = str(summary["made_at"])
            note_identity(Finished(folder, job.key, identity, hashes, made_at, told))
        return place

    def _publish(self, folder: Path) -> None:
        summary = read_summary(folder)
        if summary is not None:
            publish(summary, self.store, self.config.run_log)

    def _unreadable(self, path: Path, sentence: str) -> Finding:
        from leakpipe.findings import Finding

        # A result names recordings by their place among the recordings, not on the machine.
        plain = sentence.replace(f"{self.config.recordings.folder}/", "")
        said = f"{path.name} could not be used and was left out: {plain}"
        return Finding(
            "recording-unreadable", "watch", path.name, said, {"recording": self._relative(path)}
        )
