"""How fast, against the machine's limit and against the obvious script, in one run.

``python tests/benchmarks/throughput.py [--spectra 100] [--points 32768]`` writes a simulated run
(raw folders, then JCAMP-DX) and prints spectra per second of

- the limit: read, Fourier transform, a fixed phase, sums over the windows;
- this program: ``watch --once`` with everything on, into a logbook, start-up included, and the
  measuring alone;
- the obvious script: nmrglue's reader, automatic phase and baseline, sums;

with the error of the reactant's amount against the simulated truth, and the time and memory of the
commands. One process each, one BLAS thread, on whatever else the machine is doing: read the
ratios, not the rates.
"""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import contextlib
import io
import resource
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import nmrglue as ng
import numpy as np
import scipy.fft

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from demo_runs import dunmarolide  # noqa: E402
from demo_runs.sheets import write_sheet  # noqa: E402
from demo_runs.simulate import SimulatedSpectrum, simulate_run  # noqa: E402
from demo_runs.write import Format, write  # noqa: E402
from kinetics.run import load_run  # noqa: E402
from kinetics.spectra.arrival import Source  # noqa: E402
from kinetics.spectra.readers import read  # noqa: E402

STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)
REFERENCE, REACTANT = (3.06, 3.22), (1.16, 1.34)
OBVIOUS = 4  # spectra; it is too slow for more


def made(points: int, count: int) -> list[SimulatedSpectrum]:
    """A run at 400 MHz with so many points."""
    scenario = dunmarolide.demo()
    instrument = replace(
        scenario.instrument, points=points, spectral_width_hz=6400.0, frequency_mhz=400.0
    )
    scenario = replace(scenario, instrument=instrument)
    return list(simulate_run(scenario, seed=1, started=STARTED, count=count))


def timed(work: Callable[[], object]) -> float:
    """Wall time in s."""
    begun = time.perf_counter()
    work()
    return time.perf_counter() - begun


def the_limit(folder: Path, names: list[str]) -> None:
    """Read, transform, turn, sum."""
    for name in names:
        (raw,) = read(folder, Source.named(folder, name))
        size = 2 * raw.data.size
        fid = np.zeros(size, np.complex64)
        fid[: raw.data.size] = raw.data
        values = (scipy.fft.fft(fid) * np.complex64(1j)).real
        for low, high in (REFERENCE, REACTANT):
            values[int(low / 20 * size) : int(high / 20 * size)].sum()


def obvious(folder: Path, names: list[str]) -> list[float]:
    """The script one would write first; returns reactant over reference, per proton."""
    out = []
    for name in names:
        dic, data = ng.bruker.read(str(folder / name))
        data = ng.bruker.remove_digital_filter(dic, data)
        data = ng.proc_base.em(data, lb=0.3 / 6400.0)
        data = ng.proc_base.zf_auto(ng.proc_base.zf_double(data, 1))
        data = ng.proc_base.rev(ng.proc_base.fft(data))
        with contextlib.redirect_stdout(io.StringIO()):
            data = ng.proc_autophase.autops(data, "acme", disp=False)
        data = ng.proc_bl.baseline_corrector(data.real)
        ppm = 5.0 + (0.5 - np.arange(data.size) / data.size) * 6400.0 / 400.0
        sums = [data[(ppm > low) & (ppm < high)].sum() for low, high in (REFERENCE, REACTANT)]
        out.append(float(sums[1] / 3 / (sums[0] / 6)))
    return out


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--spectra", type=int, default=100)
    parser.add_argument("--points", type=int, default=32768)
    options = parser.parse_args()
    warnings.simplefilter("ignore")
    spectra = made(options.points, options.spectra)
    truth = np.array([s.truth.amounts["dunmarolide"] for s in spectra])
    kinds: tuple[Format, ...] = ("raw", "jcamp")
    with tempfile.TemporaryDirectory() as home_name:
        home = Path(home_name)
        write_sheet(home / "sheet.toml", STARTED)
        print(f"{options.spectra} spectra of {options.points} complex points")
        for kind in kinds:
            folder = home / kind
            folder.mkdir()
            for spectrum in spectra:
                write(spectrum, folder, kind)
            names = sorted((p.name for p in folder.iterdir()), key=lambda n: (len(n), n))
            the_limit(folder, names[:5])
            limit = options.spectra / timed(lambda f=folder, n=names: the_limit(f, n))  # type: ignore[misc]
            logbook = home / f"{kind}.logbook"
            command = [sys.executable, "-m", "kinetics", "watch", folder, "--once"]
            command += ["--sheet", home / "sheet.toml", "--logbook", logbook]
            whole = timed(
                lambda c=command: subprocess.run(  # type: ignore[misc]
                    list(map(str, c)), cwd=ROOT, check=True, stderr=subprocess.DEVNULL
                )
            )
            ours = options.spectra / (whole - 2.0)  # two looks, 2 s apart, are no work
            run = load_run(logbook)
            error = run.amounts.values[:, run.amounts.species.index("dunmarolide")] / truth - 1
            print(
                f"{kind:6s} limit {limit:7.1f}/s   this program {ours:7.1f}/s "
                f"({ours / limit:.3f} of the limit), reactant off by "
                f"{100 * np.median(np.abs(error)):.2f} % in the median",
                flush=True,
            )
            if kind == "raw":
                begun = time.perf_counter()
                found = obvious(folder, names[:OBVIOUS])
                slow = OBVIOUS / (time.perf_counter() - begun)
                wrong = np.array(found) * 0.05 / truth[:OBVIOUS] - 1
                print(
                    f"       obvious script {slow:6.2f}/s: this program is {ours / slow:.0f} times "
                    f"as fast; reactant off by {100 * np.median(np.abs(wrong)):.1f} %",
                    flush=True,
                )
        help_s = timed(
            lambda: subprocess.run(
                [sys.executable, "-m", "kinetics", "--help"],
                cwd=ROOT,
                check=True,
                stdout=subprocess.DEVNULL,
            )
        )
        memory = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
        print(f"--help {help_s:.2f} s; largest resident memory of a command {memory:.0f} MB")


if __name__ == "__main__":
    main()
