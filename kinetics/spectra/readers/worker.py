"""The border: reading in a process of its own, which can be replaced.

A damaged file may loop for ever, ask for terabytes, or bring the interpreter down. So files are
read in a worker with a limit on processor time and memory for each source, and on the time waited
for it. What happens then:

====================================  ============================================================
the worker                            the source
====================================  ============================================================
uses up its processor time            is unreadable: no good file needs that much
wants more memory than allowed        is unreadable
dies                                  is tried once more in a new worker, then unreadable
is silent for too long (a share       is not read yet; unreadable after three such times with
that stalls)                          unchanged files
====================================  ============================================================

Requests go in batches and replies come one by one, so the worker reads ahead while the caller
measures: on two cores that is faster than reading in the same process.
"""

from __future__ import annotations

import contextlib
import logging
import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
import weakref
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import IO, Any

from kinetics.errors import KettlewatchError, NotYetError, UnreadableError
from kinetics.spectra.arrival import Source
from kinetics.spectra.model import Raw
from kinetics.spectra.readers import read

log = logging.getLogger(__name__)

Outcome = tuple[Raw, ...] | UnreadableError | NotYetError
Item = tuple[Path, Source]

PROCESSOR_S = 8.0
SILENCE_S = 10.0
# What reading may take beside the interpreter and its libraries.
MEMORY_BYTES = 512 << 20
_START_S = 60.0
_STALLS = 3


class _Process:
    """A worker process, its requests a pipe, its replies a queue that holds two."""

    def __init__(self, processor_s: float, memory_bytes: int) -> None:
        home = str(Path(__file__).resolve().parents[3])
        code = (
            f"import sys; sys.path.insert(0, {home!r}); "
            f"from kinetics.spectra.readers.worker import serve; "
            f"serve({processor_s!r}, {memory_bytes!r})"
        )
        self.popen = subprocess.Popen(
            [sys.executable, "-c", code],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
        )
        assert self.popen.stdin is not None
        assert self.popen.stdout is not None
        self._requests: IO[bytes] = self.popen.stdin
        self._replies: queue.Queue[Any] = queue.Queue(2)
        self._over = threading.Event()
        threading.Thread(
            target=_collect, args=(self.popen.stdout, self._replies, self._over), daemon=True
        ).start()

    def ask(self, items: Sequence[Item]) -> None:
        """Send a batch of requests; OSError if the process has gone."""
        pickle.dump(list(items), self._requests)
        self._requests.flush()

    def reply(self, within_s: float) -> Any:
        """Return the next reply; EOFError if the process has gone, queue.Empty in vain."""
        found = self._replies.get(timeout=within_s)
        if found is None:
            raise EOFError
        return found

    def end(self) -> None:
        """End the process."""
        self._over.set()
        self.popen.kill()
        with contextlib.suppress(OSError):
            self._requests.close()
        # One that hangs in a dead share ends when the share answers.
        with contextlib.suppress(subprocess.TimeoutExpired):
            self.popen.wait(timeout=2.0)


def _collect(stream: IO[bytes], replies: queue.Queue[Any], over: threading.Event) -> None:
    """Hand replies on until the process goes; None is the last."""
    found: Any = ()
    with stream:
        while found is not None:
            try:
                found = pickle.load(stream)
            except (EOFError, OSError, ValueError, pickle.UnpicklingError):
                found = None
            while not over.is_set():
                with contextlib.suppress(queue.Full):
                    replies.put(found, timeout=0.2)
                    break


class ReadingWorker:
    """Reads sources in a process that is replaced when a file brings it down.

    The process starts with the first request and ends with `close`, or when its owner does. Use
    as a context manager, or call `close`.

    Parameters
    ----------
    processor_s
        Processor time one source may take, s.
    silence_s
        Time waited for one source, s.
    memory_bytes
        Memory reading may take beside what the process itself needs.
    """

    def __init__(
        self,
        processor_s: float = PROCESSOR_S,
        silence_s: float = SILENCE_S,
        memory_bytes: int = MEMORY_BYTES,
    ) -> None:
        self._limits = (processor_s, memory_bytes)
        self._silence_s = silence_s
        self._process: _Process | None = None
        self._ending: weakref.finalize[Any, Any] | None = None
        self._stalled: dict[tuple[str, str], tuple[str, int]] = {}
        self._series: tuple[tuple[Path, str, str], tuple[Raw, ...]] | None = None

    def __enter__(self) -> ReadingWorker:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @property
    def process_id(self) -> int | None:
        """Of the process that reads now; None before the first request."""
        return None if self._process is None else self._process.popen.pid

    def read(self, root: Path, source: Source) -> tuple[Raw, ...]:
        """Read one source; see `kinetics.spectra.readers.read`.

        Raises
        ------
        NotYetError, UnreadableError
            As there, and as the table above says.
        """
        key = (root, source.name, source.signature)
        if self._series is not None and self._series[0] == key:
            return self._series[1]
        (outcome,) = self.read_all([(root, source)])
        if isinstance(outcome, Exception):
            raise outcome
        # A file of many rows is asked for once for each of them: the last one stays at hand.
        self._series = (key, outcome) if len(outcome) > 1 else None
        return outcome

    def read_all(self, items: Sequence[Item]) -> Iterator[Outcome]:
        """Read sources in order, each to what it holds or to the reason why not.

        The caller may take its time between two: the worker is ahead by about one source.
        """
        at = 0
        while at < len(items):
            process = self._running()
            try:
                process.ask(items[at:])
                while at < len(items):
                    yield self._reply(process, items[at])
                    at += 1
            except (EOFError, OSError):
                yield self._after_a_death(items[at])
                at += 1
            except queue.Empty:
                self.close()
                yield self._after_a_stall(items[at])
                at += 1
            except GeneratorExit:
                self.close()  # replies nobody waits for must not answer the next request
                raise

    def close(self) -> None:
        """End the process."""
        if self._ending is not None:
            self._ending()
        self._process = self._ending = None

    def _reply(self, process: _Process, item: Item) -> Outcome:
        outcome: Outcome = process.reply(self._silence_s)
        self._stalled.pop((str(item[0]), item[1].name), None)
        return outcome

    def _running(self) -> _Process:
        if self._process is not None and self._process.popen.poll() is None:
            return self._process
        self.close()
        process = _Process(*self._limits)
        self._process = process
        self._ending = weakref.finalize(self, process.end)
        try:
            process.reply(_START_S)  # "ready"
        except (EOFError, queue.Empty):
            self.close()
            raise KettlewatchError("the process that reads spectra does not start") from None
        return process

    def _after_a_death(self, item: Item) -> Outcome:
        if self._died_of_time():
            return UnreadableError(_TOO_LONG)
        log.warning("the reading process ended at %s; trying again", item[1].name)
        process = self._running()
        try:
            process.ask([item])
            return self._reply(process, item)
        except (EOFError, OSError):
            if self._died_of_time():
                return UnreadableError(_TOO_LONG)
            return UnreadableError("the file brings the reading process down: it is damaged")
        except queue.Empty:
            self.close()
            return self._after_a_stall(item)

    def _died_of_time(self) -> bool:
        if self._process is None:
            return False
        with contextlib.suppress(subprocess.TimeoutExpired):
            self._process.popen.wait(timeout=2.0)
        return _TIME_SIGNAL > 0 and self._process.popen.returncode == -_TIME_SIGNAL

    def _after_a_stall(self, item: Item) -> Outcome:
        key, signature = (str(item[0]), item[1].name), item[1].signature
        known, count = self._stalled.get(key, ("", 0))
        count = count + 1 if known == signature else 1
        self._stalled[key] = (signature, count)
        if count >= _STALLS:
            return UnreadableError(
                f"reading takes longer than {self._silence_s:g} s each time, tried {count} times"
            )
        return NotYetError(f"reading takes longer than {self._silence_s:g} s; tried again")


_TOO_LONG = "reading takes far longer than any good file does: it is damaged"
_TIME_SIGNAL = int(signal.SIGPROF) if hasattr(signal, "SIGPROF") else 0


def serve(processor_s: float, memory_bytes: int) -> None:
    """Read what is asked for on standard input until that ends: the worker's side."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the owner's to handle
    requests, replies = sys.stdin.buffer, os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)  # whatever a library prints must not mix with the replies
    _import_readers()
    _limit_memory(memory_bytes)
    with contextlib.suppress(EOFError, OSError):
        _send(replies, "ready")
        while True:
            for root, source in pickle.load(requests):
                _send(replies, _outcome(root, source, processor_s))


def _send(replies: IO[bytes], what: object) -> None:
    pickle.dump(what, replies, protocol=5)
    replies.flush()


def _outcome(root: Path, source: Source, processor_s: float) -> Outcome:
    _alarm(processor_s)
    try:
        return read(root, source)
    except (UnreadableError, NotYetError) as why:
        return type(why)(str(why))  # without the chain, which may not survive the way
    finally:
        _alarm(0.0)


def _alarm(seconds: float) -> None:
    """Let the process die after so much processor time; 0 takes it back."""
    if sys.platform != "win32":
        signal.setitimer(signal.ITIMER_PROF, seconds)


def _limit_memory(more: int) -> None:
    if sys.platform == "win32":
        return
    import resource

    import psutil

    now = psutil.Process().memory_info().vms
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    limit = now + more if hard == resource.RLIM_INFINITY else min(now + more, hard)
    resource.setrlimit(resource.RLIMIT_AS, (limit, hard))


def _import_readers() -> None:
    """Load every library a reader needs, before the limits count."""
    import importlib

    import nmrglue  # noqa: F401

    from kinetics.spectra.readers import READERS

    for module in READERS.values():
        importlib.import_module(module)
