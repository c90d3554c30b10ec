"""`verify` finds whatever was changed, says where, and changes nothing itself."""

import hashlib
import json
import shutil
import sqlite3
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from kinetics.errors import InputError, LogbookError
from kinetics.logbook import codec
from kinetics.logbook.decisions import chain_hash, decide
from kinetics.logbook.record import Record
from kinetics.verify import Verification, verify
from tests.command import kinetics
from tests.recorded import drop, recorded_run, take

COUNT = 22  # past the second calibration
BROKEN = "##TITLE= x\n##JCAMP-DX= 5.01\n##DATA TYPE= INFRARED SPECTRUM\n##END=\n"


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("verify")
    (home / "run").mkdir()
    (home / "run" / "broken.jdx").write_text(BROKEN)
    logbook = recorded_run(home, COUNT)
    with Record(logbook) as record:
        for source in ("3", "4"):
            decide(
                record.connection, who="M. Ott", kind="set-aside", subject=source, new="out",
                why="bubble",
            )  # fmt: skip
    return home


@pytest.fixture
def logbook(home: Path, tmp_path: Path) -> Path:
    """A logbook that a test may tamper with."""
    return Path(shutil.copytree(home / "run.logbook", tmp_path / "mine.logbook"))


def tamper(logbook: Path, sql: str, *values: object) -> None:
    connection = sqlite3.connect(logbook / "record.sqlite")
    done = connection.execute(sql, values)
    assert done.rowcount >= 1
    connection.commit()
    connection.close()


def value(logbook: Path, sql: str) -> object:
    connection = sqlite3.connect(logbook / "record.sqlite")
    found: object = connection.execute(sql).fetchone()[0]
    connection.close()
    return found


def only(found: Verification, kind: str) -> list[str]:
    """The differences, which must all be of one kind."""
    assert found.found
    named = [line for line in found.lines if line.split(":")[0] in KINDS]
    assert named
    assert {line.split(":")[0] for line in named} == {kind}, named
    return named


KINDS = ("record", "sheet", "decision", "trace", "calibration", "raw file", "facts", "row")


def hashes(folder: Path) -> dict[str, str]:
    # The shared memory of a reader and an empty write-ahead file hold nothing of the record.
    files = [
        p
        for p in sorted(folder.rglob("*"))
        if p.is_file() and "-shm" not in p.name and not ("-wal" in p.name and not p.stat().st_size)
    ]
    return {str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest() for p in files}


def test_an_honest_record_is_reproduced_and_nothing_is_written(home: Path) -> None:
    before = hashes(home)
    done = kinetics("verify", home / "run.logbook")
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.splitlines() == [
        "Sheets: 1 version.",
        "Decisions: the chain of 3 is whole.",
        f"Traces: {COUNT + 20} of {COUNT + 20} intact.",
        f"Raw files: {COUNT + 1} of {COUNT + 1} unchanged.",
        f"Rows: {COUNT + 20} of {COUNT + 20} recomputed with the same result (states and remarks "
        "exactly, numbers to 1e-6).",
        "Calibrations: 2 of 2 reproduced.",
        "No difference found.",
    ]
    assert hashes(home) == before


def test_a_tampered_integral(home: Path, logbook: Path) -> None:
    where = "FROM measured WHERE spectrum = 5 AND calibration = 2"
    integrals = codec.integrals_from_bytes(bytes(value(logbook, f"SELECT integrals {where}")))  # type: ignore[arg-type]
    values = integrals.values.copy()
    values[1] *= 1 + 3e-6
    forged = codec.integrals_to_bytes(
        type(integrals)(values, integrals.covariance, integrals.offsets_ppm, integrals.heights)
    )
    tamper(
        logbook,
        "UPDATE measured SET integrals = ? WHERE spectrum = 5 AND calibration = 2",
        forged,
    )
    source = value(logbook, "SELECT source FROM spectra WHERE id = 5")
    done = kinetics("verify", logbook, "--raw", home / "run")
    assert done.returncode == 1
    first = done.stdout.splitlines()[0]
    assert first.startswith(f"row: {source} (calibration 2): integral of dunmarolide is recorded")
    assert done.stdout.splitlines()[-1] == "1 difference found."


ROW = "UPDATE measured SET {} WHERE spectrum = 5 AND calibration = 2"
REMARK = json.dumps([{"code": "phase-doubtful", "seen": "It looks off.", "matters": "", "todo": "",
                      "doubtful": True, "subject": ""}])  # fmt: skip


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ("state = 'doubtful'", "state is recorded as doubtful, found measured"),
        (f"remarks = '{REMARK}'", "remarks are recorded as phase-doubtful, found none"),
        ("noise_sd = noise_sd * 1.00001", "noise is recorded as"),
        ("line_width_hz = NULL", "line width is recorded as nan"),
        ("first_ppm = first_ppm + 1e-8", "axis is recorded as"),
        (
            "processing = replace(processing, '\"zero_fill\": 2', '\"zero_fill\": 4')",
            "zero_fill is",
        ),
        ("picture = zeroblob(length(picture))", "picture is recorded as 0, found"),
        ("integrals = x'00'", "cannot be read"),
        ("remarks = '[{\"colour\": 1}]'", "cannot be read"),
    ],
)
def test_every_part_of_a_row_is_looked_at(
    home: Path, logbook: Path, change: str, words: str
) -> None:
    tamper(logbook, ROW.format(change))
    named = only(verify(logbook, home / "run"), "row")
    assert len(named) == 1
    assert words in named[0]


def test_a_row_that_was_taken_out(home: Path, logbook: Path) -> None:
    tamper(logbook, "DELETE FROM measured WHERE spectrum = 7 AND calibration = 2")
    assert "(calibration 2): is missing" in only(verify(logbook, home / "run"), "row")[0]


def test_a_spectrum_that_was_taken_out_is_named(home: Path, logbook: Path) -> None:
    source = value(logbook, f"SELECT source FROM spectra WHERE id = {COUNT}")
    tamper(logbook, f"DELETE FROM measured WHERE spectrum = {COUNT}")
    tamper(logbook, f"DELETE FROM spectra WHERE id = {COUNT}")
    lines = verify(logbook, home / "run").lines
    assert any(f"not in the record: {source} (" in line for line in lines)


def test_a_single_trace_byte(home: Path, logbook: Path) -> None:
    place = int(str(value(
        logbook, "SELECT trace_offset FROM measured WHERE spectrum = 9 AND calibration = 2"
    )))  # fmt: skip
    with (logbook / "traces.f32").open("r+b") as file:
        file.seek(4 * place + 401)
        byte = file.read(1)[0]
        file.seek(4 * place + 401)
        file.write(bytes([byte ^ 1]))
    named = only(verify(logbook, home / "run"), "trace")
    assert len(named) == 1
    assert "its bytes changed" in named[0]


def test_a_trace_forged_with_its_checksum(home: Path, logbook: Path) -> None:
    """Another spectrum's trace, CRC and all, in the place of this one's."""
    other = "(SELECT {0} FROM measured WHERE spectrum = 8 AND calibration = 2)"
    changes = ", ".join(
        f"{c} = {other.format(c)}" for c in ("trace_offset", "trace_size", "trace_crc")
    )
    tamper(logbook, ROW.format(changes))
    assert "trace is recorded as" in only(verify(logbook, home / "run"), "row")[0]


def test_a_tampered_decision(home: Path, logbook: Path) -> None:
    tamper(logbook, "UPDATE decisions SET why = 'phase' WHERE id = 2")
    found = verify(logbook, home / "run")
    assert only(found, "decision")[0].startswith("decision: number 2 was changed")
    assert "Decisions: 1 of 3 broken." in found.lines


def test_a_decision_forged_with_its_hash_or_taken_out(home: Path, logbook: Path) -> None:
    connection = sqlite3.connect(logbook / "record.sqlite")
    connection.row_factory = sqlite3.Row
    row = dict(connection.execute("SELECT * FROM decisions WHERE id = 2").fetchone())
    connection.close()
    keys = ("previous", "at", "who", "kind", "subject", "old", "new")
    forged = chain_hash(*(row[key] for key in keys), "phase")
    tamper(logbook, "UPDATE decisions SET why = 'phase', hash = ? WHERE id = 2", forged)
    assert only(verify(logbook, home / "run"), "decision")[0].startswith("decision: number 3")
    tamper(logbook, "DELETE FROM decisions WHERE id = 2")
    assert only(verify(logbook, home / "run"), "decision")[0].startswith("decision: number 3")


def test_a_tampered_sheet(home: Path, logbook: Path) -> None:
    changed = "replace(text, 'protons = 6', 'protons = 9')"
    tamper(logbook, f"UPDATE sheets SET text = {changed}")
    assert "is not that which was put down" in only(verify(logbook, home / "run"), "sheet")[0]
    text = str(value(logbook, "SELECT text FROM sheets"))
    digest = hashlib.sha256(text.encode()).hexdigest()
    tamper(logbook, "UPDATE sheets SET sha256 = ?", digest)
    assert "no decision put down version 1" in only(verify(logbook, home / "run"), "sheet")[0]


def test_a_tampered_calibration(home: Path, logbook: Path) -> None:
    data = bytes(value(logbook, "SELECT data FROM calibrations WHERE id = 2"))  # type: ignore[arg-type]
    arrays = codec.unpack(data)
    arrays["p1_deg"] = np.float64(arrays["p1_deg"]) + 1.0
    tamper(logbook, "UPDATE calibrations SET data = ? WHERE id = 2", codec.pack(arrays))
    found = verify(logbook, home / "run")
    assert any("calibration: number 2: p1_deg is recorded as" in line for line in found.lines)
    # What the false calibration would have measured is not what the rows say.
    assert any(line.startswith("row: and ") for line in found.lines)
    tamper(logbook, "UPDATE calibrations SET data = x'504b0304' WHERE id = 2")
    assert any("number 2 cannot be read" in line for line in verify(logbook, home / "run").lines)


def test_tampered_times_and_facts(home: Path, logbook: Path) -> None:
    tamper(
        logbook,
        "UPDATE spectra SET stamp = replace(stamp, '2026-03-03', '2026-03-02') WHERE id = 6",
    )
    named = only(verify(logbook, home / "run"), "facts")
    assert all("is recorded as 2026-03-02" in line for line in named)
    tamper(logbook, "UPDATE spectra SET facts = replace(facts, '\"scans\": ', '\"scans\": 1')")
    assert any("scans is recorded as 1" in line for line in verify(logbook, home / "run").lines)


def edit(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(bytes(data))


@pytest.mark.parametrize(
    ("harm", "found", "words"),
    [
        (lambda run: edit(run / "2" / "fid"), True, "raw file: 2: its content is not what was"),
        (lambda run: shutil.rmtree(run / "2"), False, "no longer there, not compared: 2."),
        (
            lambda run: (run / "broken.jdx").write_text(BROKEN + " "),
            True,
            "raw file: broken.jdx: its content is not",
        ),
        (
            lambda run: shutil.copytree(run / "2", run / "99"),
            False,
            "not in the record: 99 (",
        ),
    ],
)
def test_raw_files_that_changed_or_went(
    home: Path, tmp_path: Path, harm: Callable[[Path], object], found: bool, words: str
) -> None:
    run = Path(shutil.copytree(home / "run", tmp_path / "run"))
    harm(run)
    seen = verify(home / "run.logbook", run)
    assert seen.found is found
    assert any(words in line for line in seen.lines), seen.lines
    if not found:
        assert seen.lines[-1] == "No difference found in what could be compared."


def test_without_raw_files_the_rest_is_still_looked_at(home: Path, tmp_path: Path) -> None:
    away = tmp_path / "away"
    away.mkdir()
    for name in ("run.logbook", "sheet.toml"):
        (shutil.copytree if "log" in name else shutil.copy)(home / name, away / name)
    tamper(away / "run.logbook", "UPDATE meta SET value = '/nowhere' WHERE key = 'run_folder'")
    seen = verify(away / "run.logbook")
    assert not seen.found
    assert any("were not compared; give it with --raw" in line for line in seen.lines)
    tamper(away / "run.logbook", "UPDATE decisions SET who = 'x' WHERE id = 3")
    assert verify(away / "run.logbook").found
    with pytest.raises(InputError, match="no such run folder"):
        verify(home / "run.logbook", tmp_path / "missing")


def test_a_replaced_spectrum_and_a_second_sheet(tmp_path: Path) -> None:
    """Earlier contents are gone by rights; rows of both sheets are recomputed."""
    logbook = recorded_run(tmp_path, 3)
    drop(tmp_path / "other", 3, seed=6)
    shutil.rmtree(tmp_path / "run" / "2")
    shutil.copytree(tmp_path / "other" / "2", tmp_path / "run" / "2")
    sheet = tmp_path / "sheet.toml"
    sheet.write_text(sheet.read_text().replace("window = [2.11, 2.27]", "window = [2.10, 2.28]"))
    take(tmp_path / "run", sheet, logbook)
    seen = verify(logbook)
    assert not seen.found, seen.lines
    assert any(line.startswith("1 spectra were replaced by a later content") for line in seen.lines)
    assert "Sheets: 2 versions." in seen.lines
    assert "Calibrations: 2 of 2 reproduced." in seen.lines


def test_a_folder_that_continues_the_run(tmp_path: Path) -> None:
    drop(tmp_path / "more", 5, first=3)
    logbook = recorded_run(tmp_path, 3)
    sheet = tmp_path / "sheet.toml"
    sheet.write_text(sheet.read_text().replace("[time]", '[files]\nalso = ["more"]\n\n[time]'))
    take(tmp_path / "run", sheet, logbook)
    seen = verify(logbook)
    assert not seen.found, seen.lines
    assert "Raw files: 5 of 5 unchanged." in seen.lines


def test_damage_that_no_reader_gets_past_is_an_error(tmp_path: Path) -> None:
    (tmp_path / "x.logbook").mkdir()
    with pytest.raises(InputError, match="there is no logbook"):
        verify(tmp_path / "x.logbook")
    (tmp_path / "x.logbook" / "record.sqlite").write_bytes(b"no database at all" * 100)
    with pytest.raises(LogbookError, match=r"damaged|read"):
        verify(tmp_path / "x.logbook")
