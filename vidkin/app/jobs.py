"""Several sheets, in several processes: one that fails never stops the rest, and none leaves half a result."""

from __future__ import annotations

import multiprocessing
import os
import signal
import traceback
from collections import Counter
from collections.abc import Callable, Generator, Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TypeAlias

from vidkin.app.actions import Outcome, analyse, beside
from vidkin.errors import EXIT_INTERNAL, EXIT_OK, UsageError, VidkinError
from vidkin.stages import Settings


@dataclass(frozen=True, slots=True, kw_only=True)
class Failed:
    """A sheet whose analysis stopped with an error: what happened, what to do, its exit code and the traceback."""

    sheet: Path
    message: str
    hint: str
    exit_code: int
    trace: str = ""


def joint_exit_code(codes: Sequence[int]) -> int:
    """One exit code for several sheets: 0 if all are 0, else the smallest of the others (an error before a gap)."""
    return min((code for code in codes if code != EXIT_OK), default=EXIT_OK)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Task:
    sheet: Path
    folder: Path
    settings: Settings | None
    pictures: bool


#: A task's number and what came of it.
_Done: TypeAlias = "tuple[int, Outcome | Failed]"


def analyse_all(
    sheet_paths: Sequence[Path],
    out: Path | None = None,
    *,
    jobs: int = 1,
    settings: Settings | None = None,
    pictures: bool = True,
    finished: Callable[[Outcome | Failed], None] | None = None,
) -> list[Outcome | Failed]:
    """The whole job on each sheet, up to `jobs` at once; one that fails never stops the rest.

    Parameters
    ----------
    sheet_paths : sequence of Path
    out : Path, optional
        A folder in which each sheet gets its own `<sheet>-result`; next to each sheet if not given.
    jobs : int
        Processes; the results do not depend on it.
    settings, pictures
        As in `analyse`.
    finished : callable, optional
        Called with each result as it comes in.

    Returns
    -------
    list of Outcome or Failed
        In the order of the sheets.

    Raises
    ------
    UsageError
        If two sheets would write into the same folder.
    """
    sheets = [Path(sheet) for sheet in sheet_paths]
    folders = [beside(s, "result") if out is None else Path(out) / beside(s, "result").name for s in sheets]
    for folder, count in Counter(folder.resolve() for folder in folders).items():
        if count > 1:
            raise UsageError(
                f"{count} of the sheets would write into the same folder, {folder}.",
                "Name each sheet once, and give sheets different names.",
            )
    tasks = [
        _Task(sheet=sheet, folder=folder, settings=settings, pictures=pictures)
        for sheet, folder in zip(sheets, folders, strict=True)
    ]
    results: dict[int, Outcome | Failed] = {}
    with closing(_one_by_one(tasks) if jobs == 1 else _at_once(tasks, jobs)) as done:
        for index, result in done:
            results[index] = result
            if finished is not None:
                finished(result)
    return [results[index] for index in range(len(tasks))]


def _one_by_one(tasks: Sequence[_Task]) -> Generator[_Done]:
    for index, task in enumerate(tasks):
        yield index, _guarded(task)


def _at_once(tasks: Sequence[_Task], jobs: int) -> Generator[_Done]:
    """In processes. Where one of them dies, the pool is lost: what it had not finished is run again, each alone."""
    lost: list[int] = []
    with _pool(min(jobs, len(tasks))) as pool:
        futures: dict[Future[Outcome | Failed], int] = {}
        for index, task in enumerate(tasks):
            try:
                futures[_submit(pool, task)] = index
            except BrokenProcessPool:
                lost.append(index)
        for future in as_completed(futures):
            try:
                result = future.result()
            except BrokenProcessPool:
                lost.append(futures[future])
            else:
                yield futures[future], result
    for index in sorted(lost):
        with _pool(1) as pool:
            try:
                result = _submit(pool, tasks[index]).result()
            except BrokenProcessPool:
                result = _died(tasks[index])
        yield index, result


def _submit(pool: ProcessPoolExecutor, task: _Task) -> Future[Outcome | Failed]:
    """Hand a task in; the process that may start for it is born deaf to Ctrl-C, which this one hears."""
    if not hasattr(signal, "pthread_sigmask"):
        return pool.submit(_in_process, task)
    heard = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        return pool.submit(_in_process, task)
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, heard)


@contextmanager
def _pool(jobs: int) -> Iterator[ProcessPoolExecutor]:
    """Fresh processes (no fork: decoder and solvers have threads); on any exception they stop and clean up."""
    before = set(multiprocessing.active_children())
    pool = ProcessPoolExecutor(jobs, mp_context=multiprocessing.get_context("spawn"), initializer=_heed_signals)
    try:
        yield pool
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        for child in set(multiprocessing.active_children()) - before:
            child.terminate()
        raise
    finally:
        pool.shutdown(wait=True)


def _heed_signals() -> None:
    """Ctrl-C reaches every process of a terminal; the first one alone heeds it and stops the others once."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _leave)


def _leave(_signal: int, _frame: object) -> None:
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    raise SystemExit(128 + signal.SIGTERM)


def _in_process(task: _Task) -> Outcome | Failed:
    try:
        return _guarded(task)
    except SystemExit:  # told to leave: what was half written is gone by now, and no other task may start
        os._exit(128 + signal.SIGTERM)


def _guarded(task: _Task) -> Outcome | Failed:
    """One sheet; errors become values."""
    try:
        return analyse(task.sheet, task.folder, settings=task.settings, pictures=task.pictures)
    except VidkinError as error:
        return Failed(
            sheet=task.sheet,
            message=error.message,
            hint=error.hint,
            exit_code=error.exit_code,
            trace=traceback.format_exc(),
        )
    except Exception as error:
        return Failed(
            sheet=task.sheet,
            message=f"Internal error: {type(error).__name__}: {error}",
            hint="This is a fault of vidkin; run again with --debug and report what it prints.",
            exit_code=EXIT_INTERNAL,
            trace=traceback.format_exc(),
        )


def _died(task: _Task) -> Failed:
    return Failed(
        sheet=task.sheet,
        message="The process that analysed this sheet ended abruptly.",
        hint="If memory ran out, use fewer --jobs; if not, the clip may be damaged: copy it from the phone again.",
        exit_code=EXIT_INTERNAL,
    )
