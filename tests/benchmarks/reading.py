"""How fast is reading: packed JCAMP-DX against nmrglue's reader, and the cost of the worker.

    python -m tests.benchmarks.reading [SPECTRA]

Packed JCAMP-DX: 64k complex points, best of three of each, in the same process. The worker: a
backlog of raw folders (32k complex points) is read and measured as the follower does, once in the
same process and once through the worker, in turn, three times each; the best of each counts.
"""

import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import nmrglue as ng
import numpy as np

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import Format, write
from kinetics.measure import Recipe, follow_plan, measure
from kinetics.sheet import read_sheet
from kinetics.signals.calibration import calibrate
from kinetics.spectra.arrival import Source
from kinetics.spectra.readers import read
from kinetics.spectra.readers.worker import ReadingWorker
from tests.recorded import STARTED


def written(folder: Path, kind: Format, count: int, points: int) -> list[Source]:
    scenario = dunmarolide.demo()
    scenario = replace(scenario, instrument=replace(scenario.instrument, points=points))
    for spectrum in simulate_run(scenario, seed=7, started=STARTED, count=count):
        write(spectrum, folder, kind)
    return [Source.named(folder, path.name) for path in sorted(folder.iterdir())]


def best(action: Callable[[], object], times: int = 3) -> float:
    """Shortest time of an action, s."""
    spent = []
    for _ in range(times):
        begun = time.perf_counter()
        action()
        spent.append(time.perf_counter() - begun)
    return min(spent)


def packed() -> tuple[float, float]:
    """Times of our reader and nmrglue's, s, after checking that the values are identical."""
    with tempfile.TemporaryDirectory() as home:
        folder = Path(home)
        (source,) = written(folder, "jcamp", 1, 65536)
        (ours,) = read(folder, source)
        _, parts = ng.jcampdx.read(str(folder / source.name))
        theirs = np.asarray(parts[0]) + 1j * np.asarray(parts[1])
        assert np.array_equal(ours.data, theirs.astype(np.complex64))
        own = best(lambda: read(folder, source))
        return own, best(lambda: ng.jcampdx.read(str(folder / source.name)))


def worker(count: int) -> tuple[float, float]:
    """Times of reading and measuring a backlog here and through the worker, s."""
    with tempfile.TemporaryDirectory() as home, ReadingWorker() as border:
        folder = Path(home) / "run"
        folder.mkdir()
        write_sheet(Path(home) / "sheet.toml", STARTED)
        sources = written(folder, "raw", count, 32768)
        sheet, _ = read_sheet(Path(home) / "sheet.toml")
        plan = follow_plan(sheet)
        recipe = Recipe(1, plan, calibrate(list(read(folder, sources[0])), plan))
        batches = [sources[i : i + 16] for i in range(0, count, 16)]

        def here() -> None:
            for source in sources:
                measure(read(folder, source)[0], recipe)

        def there() -> None:
            for batch in batches:
                for raws in border.read_all([(folder, source) for source in batch]):
                    assert isinstance(raws, tuple)
                    measure(raws[0], recipe)

        border.read(folder, sources[0])
        spent = [(best(here, 1), best(there, 1)) for _ in range(3)]
        return min(s[0] for s in spent), min(s[1] for s in spent)


def main() -> None:
    own, library = packed()
    print(f"64k complex points, packed: {1e3 * own:.1f} ms, nmrglue {1e3 * library:.1f} ms")
    print(f"    {library / own:.1f} times as fast")
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    here, there = worker(count)
    print(f"{count} raw folders of 32k read and measured: {count / here:.0f}/s in one process,")
    print(f"    {count / there:.0f}/s through the worker ({100 * (there / here - 1):+.1f} % time)")


if __name__ == "__main__":
    main()
