"""Every reader keeps the contract."""

from pathlib import Path

from tests.spectra import written
from tests.spectra.reader_contract import ReaderContract


class TestRawFolder(ReaderContract):
    kind, domain = "raw folder", "time"

    def write(self, folder: Path) -> str:
        return written.raw(folder)


class TestSeries(ReaderContract):
    kind, domain = "raw series", "time"

    def write(self, folder: Path) -> str:
        return written.series(folder, rows=1, declared=1)


class TestProcessedFolder(ReaderContract):
    kind, domain = "processed folder", "frequency"

    def write(self, folder: Path) -> str:
        return written.processed(folder)


class TestProcparFolder(ReaderContract):
    kind, domain = "procpar folder", "time"

    def write(self, folder: Path) -> str:
        return written.procpar(folder)


class TestProcparProcessed(ReaderContract):
    kind, domain = "procpar folder", "frequency"

    def write(self, folder: Path) -> str:
        return written.procpar_processed(folder)


class TestJcamp(ReaderContract):
    kind, domain = "JCAMP-DX", "time"

    def write(self, folder: Path) -> str:
        return written.jcamp(folder)


class TestNmrml(ReaderContract):
    kind, domain = "nmrML", "time"

    def write(self, folder: Path) -> str:
        return written.nmrml(folder)


class TestText(ReaderContract):
    kind, domain = "text", "frequency"
    cut_is_seen = False

    def write(self, folder: Path) -> str:
        return written.text(folder)


class TestTextDecimalComma(TestText):
    def write(self, folder: Path) -> str:
        return written.text(folder, separator=";", comma=True)


class TestTextComma(TestText):
    def write(self, folder: Path) -> str:
        return written.text(folder, "1.csv", separator=",")


class TestTextTabComma(TestText):
    def write(self, folder: Path) -> str:
        return written.text(folder, comma=True)
