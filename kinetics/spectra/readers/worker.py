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
import signal
import sys
from collections.abc import Iterator, Sequence
from multiprocessing import get_context
from multiprocessing.connection import Connection
from multiprocessing.context import SpawnProcess
from pathlib import Path

from kinetics.errors import NotYetError, UnreadableError
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
        self._process: SpawnProcess | None = None
        self._connection: Connection | None = None
        self._stalled: dict[tuple[str, str], tuple[str, int]] = {}

    def __enter__(self) -> ReadingWorker:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @property
    def process_id(self) -> int | None:
        """Of the process that reads now; None before the first request."""
        return None if self._process is None else self._process.pid

    def read(self, root: Path, source: Source) -> tuple[Raw, ...]:
        """Read one source; see `kinetics.spectra.readers.read`.

        Raises
        ------
        NotYetError, UnreadableError
            As there, and as the table above says.
        """
        (outcome,) = self.read_all([(root, source)])
        if isinstance(outcome, Exception):
            raise outcome
        return outcome

    def read_all(self, items: Sequence[Item]) -> Iterator[Outcome]:
        """Read sources in order, each to what it holds or to the reason why not.

        The caller may take its time between two: the worker is ahead by about one source.
        """
        at = 0
        while at < len(items):
            connection = self._running()
            try:
                connection.send(list(items[at:]))
                while at < len(items):
                    yield self._reply(connection, items[at])
                    at += 1
            except (EOFError, OSError):
                yield self._after_a_death(items[at])
                at += 1
            except _StalledError:
                self.close()
                yield self._after_a_stall(items[at])
                at += 1
            except GeneratorExit:
                self.close()  # replies nobody waits for must not answer the next request
                raise

    def close(self) -> None:
        """End the process."""
        if self._connection is not None:
            self._connection.close()
        if self._process is not None:
            self._process.kill()
            # One that hangs in a dead share ends when the share answers.
            self._process.join(timeout=2.0)
        self._process = self._connection = None

    def _reply(self, connection: Connection, item: Item) -> Outcome:
        if not connection.poll(self._silence_s):
            raise _StalledError
        outcome: Outcome = connection.recv()
        self._stalled.pop((str(item[0]), item[1].name), None)
        return outcome

    def _running(self) -> Connection:
        if self._connection is not None and self._process is not None and self._process.is_alive():
            return self._connection
        self.close()
        context = get_context("spawn")
        ours, theirs = context.Pipe()
        self._process = context.Process(
            target=_serve, args=(theirs, *self._limits), daemon=True, name="kettlewatch-reading"
        )
        self._process.start()
        theirs.close()
        self._connection = ours
        if not ours.poll(_START_S):
            self.close()
            raise UnreadableError("the reading process does not start")
        ours.recv()
        return ours

    def _after_a_death(self, item: Item) -> Outcome:
        if self._died_of_time():
            return UnreadableError(_TOO_LONG)
        log.warning("the reading process ended at %s; trying again", item[1].name)
        connection = self._running()
        try:
            connection.send([item])
            return self._reply(connection, item)
        except (EOFError, OSError):
            if self._died_of_time():
                return UnreadableError(_TOO_LONG)
            return UnreadableError("the file brings the reading process down: it is damaged")
        except _StalledError:
            self.close()
            return self._after_a_stall(item)

    def _died_of_time(self) -> bool:
        process = self._process
        if process is None:
            return False
        process.join(timeout=2.0)
        return process.exitcode in (-_TIME_SIGNAL, None) if _TIME_SIGNAL else False

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


class _StalledError(Exception):
    """No reply came in time."""


_TOO_LONG = "reading takes far longer than any good file does: it is damaged"
_TIME_SIGNAL = int(signal.SIGPROF) if hasattr(signal, "SIGPROF") else 0


def _serve(connection: Connection, processor_s: float, memory_bytes: int) -> None:
    """Read what is asked for until the other side goes."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the owner's to handle
    _import_readers()
    _limit_memory(memory_bytes)
    connection.send("ready")
    with contextlib.suppress(EOFError, OSError):
        while True:
            for root, source in connection.recv():
                connection.send(_outcome(root, source, processor_s))


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
