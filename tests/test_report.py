"""The report: whole, true to the run, inert, and complete in one file."""

import hashlib
import re
import shutil
from dataclasses import replace
from datetime import UTC, datetime
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from playwright.sync_api import Browser

from demo_runs import dunmarolide
from demo_runs.sheets import write_sheet
from demo_runs.simulate import simulate_run
from demo_runs.write import write
from kinetics import report_figures, report_record
from kinetics.errors import InputError
from kinetics.follow import follow
from kinetics.logbook.decisions import decide
from kinetics.logbook.record import Record
from kinetics.rates.words import rounded
from kinetics.remarks import Remark
from kinetics.report import report_html, save_report
from kinetics.report_words import plus_minus, pretty
from kinetics.run import Run, load_run, study_run

COUNT = 24
STARTED = datetime(2026, 3, 3, 19, 0, tzinfo=UTC)
MADE = datetime(2026, 3, 4, 7, 0, tzinfo=UTC)
SCRIPT = "<script>document.title='owned'</script><img src=//evil.example/x onerror=alert(1)>"
BREAKOUT = "</title></style></pre>{{ 7*7 }}{% raw %}&lt;\" onload='alert(2)"
MATHS = "$\\frac{x$_hidden"
VOID = {"meta", "br", "img", "link", "input", "base", "embed", "source", "hr"}


class Page(HTMLParser):
    """Elements, attributes and text of a page; tags must close in order."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.tags: list[tuple[str, dict[str, str]]] = []
        self.words: list[str] = []
        self.open: list[str] = []
        self.pre: list[str] = []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, {name: value or "" for name, value in attrs}))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, {name: value or "" for name, value in attrs}))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] == "pre":
            self.pre.append(data)
        if not self.open or self.open[-1] != "style":
            self.words.append(data)

    @property
    def text(self) -> str:
        return re.sub(r"\s+", " ", "".join(self.words))


def make(home: Path, sheet: Path) -> Path:
    folder, logbook = home / "run", home / "run.logbook"
    folder.mkdir()
    for spectrum in simulate_run(dunmarolide.demo(), seed=5, started=STARTED, count=COUNT):
        write(spectrum, folder, "raw")
    (folder / "broken.jdx").write_text("##TITLE= x\n##JCAMP-DX= 5.01\n##END=\n")
    assert follow(folder, sheet, logbook, once=True, every_s=5.0) == 0
    return logbook


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("plain")
    write_sheet(home / "sheet.toml", STARTED)
    return make(home, home / "sheet.toml")


@pytest.fixture(scope="module")
def run(plain: Path) -> Run:
    return load_run(plain)


@pytest.fixture(scope="module")
def html(run: Run) -> str:
    return report_html(run, MADE)


@pytest.fixture(scope="module")
def hostile(plain: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """The run with markup in every text that a user, a file or a folder may bring."""
    logbook = tmp_path_factory.mktemp("hostile") / "<b onclick=x>.logbook"
    shutil.copytree(plain, logbook)
    with Record(logbook) as record:
        source = load_run(logbook).entries[3].source
        decide(record.connection, who=SCRIPT, kind="set-aside", subject=source, new="out",
               why=BREAKOUT)  # fmt: skip
        decide(record.connection, who=BREAKOUT, kind="law", new="second-order", why=SCRIPT)
        record.tell("quiet", SCRIPT)
    run = load_run(logbook)
    renamed = {"dunmarolide": SCRIPT, "dunmaral": MATHS}
    sheet = run.sheet
    kinetics = sheet.kinetics.model_copy(
        update={
            "consumed": {SCRIPT: 1.0},
            "formed": {MATHS: 1.0},
            "charged": {SCRIPT: 0.4},
        }
    )
    sheet = sheet.model_copy(
        update={
            "title": BREAKOUT,
            "experiment": SCRIPT,
            "solvent": SCRIPT,
            "reference": sheet.reference.model_copy(update={"name": SCRIPT}),
            "signals": tuple(
                s.model_copy(update={"species": renamed[s.species]}) for s in sheet.signals
            ),
            "events": tuple(e.model_copy(update={"text": BREAKOUT}) for e in sheet.events),
            "kinetics": kinetics,
        }
    )
    return replace(run, sheet=sheet, sheet_text=run.sheet_text + f"# {SCRIPT}{BREAKOUT}\n")


def without_namespaces(text: str) -> str:
    return re.sub(r'xmlns(?::\w+)?="http://www\.w3\.org/[^"]*"', "", text)


def check_self_contained(page: Page) -> None:
    for tag, attributes in page.tags:
        assert tag not in {"script", "img", "link", "iframe", "object", "embed", "form", "base"}
        for name, value in attributes.items():
            assert not name.startswith("on"), (tag, name)
            if name in ("src", "href", "xlink:href", "action", "srcset"):
                assert value.startswith(("#", "data:image/png;base64,")), (tag, name, value)
            if name == "style":
                assert set(re.findall(r"url\((.)", value)) <= {"#"}


class TestWhole:
    def test_one_file(self, html: str) -> None:
        assert "http" not in without_namespaces(html).replace("http-equiv", "")
        check_self_contained(Page(html))
        style = html[html.index("<style>") : html.index("</style>")]
        assert "@import" not in style
        assert "url(" not in style
        assert "default-src 'none'" in html

    def test_ids(self, html: str) -> None:
        """Figures stand in one page: no id twice, none missing."""
        ids = re.findall(r'\bid="([^"]+)"', html)
        assert len(ids) == len(set(ids))
        used = set(re.findall(r'href="#([^"]+)"', html)) | set(re.findall(r"url\(#([^)]+)\)", html))
        assert len(used) > 10
        assert used <= set(ids)

    def test_figures(self, html: str) -> None:
        names = re.findall(r'<svg [^>]*role="img" aria-label="([^"]+)"', html)
        assert len(names) == 4
        assert "<metadata" not in html

    def test_same_again(self, run: Run, html: str) -> None:
        assert report_html(run, MADE) == html


class TestTrue:
    def test_answer(self, run: Run, html: str) -> None:
        """Constant, interval, weight and forecast are those of the study."""
        study, text = study_run(run), Page(html).text
        fit = study.by_law("first-order")
        assert fit is not None
        k = fit.parameter("k")
        ends = f"{rounded(k.low, k.value)} to {rounded(k.high, k.value)}"
        row = f"k{pretty(rounded(k.value, k.low, k.high))}{pretty(ends)}s⁻¹"
        assert re.sub(r"\s", "", row) in re.sub(r"\s", "", text)
        assert re.sub(r"\s", "", pretty(study.verdict)) in re.sub(r"\s", "", text)
        assert f"{COUNT} measured, 0 doubtful, 0 set-aside, 1 unreadable" in text
        assert f"weight {study.weights['first-order']:.3f} · {COUNT} spectra" in text
        hours = study.forecast.time_s.value / 3600
        found = re.search(r"98 % conversion at ([\d.]+) h", text)
        assert found is not None
        assert float(found[1]) == pytest.approx(hours, rel=0.01)

    def test_asked(self, html: str) -> None:
        text = Page(html).text
        for words in (
            "Experiment WX-0231",
            "dunmarolide → dunmaral",
            "dimethyl sulfone, 6 H, 3.22 to 3.06 ppm, 0.05 ± 0.0004",
            "v = k [A]²",
            "L mol⁻¹ s⁻¹",
            "target 98 %",
            "trolley bumped the magnet",
            "not a safety interlock",
            "reactant accumulates",
            "site's procedure",
            "not reproducibility",
            "zero-filled to 2 times",
            "2026-03-03 19:00:00 +00:00, started in the sheet",
        ):
            assert words in text, words

    def test_hashes_and_sheet(self, run: Run, html: str) -> None:
        page = Page(html)
        lines = "".join(sorted(f"{entry.sha256}\n" for entry in run.entries))
        assert hashlib.sha256(lines.encode()).hexdigest() in page.text
        assert hashlib.sha256(run.sheet_text.encode()).hexdigest() in page.text
        assert f"{COUNT + 1} SHA-256 hashes" in page.text
        assert page.pre == [run.sheet_text]

    def test_amounts(self, run: Run, html: str) -> None:
        rows = re.findall(
            r"<tr><td class=\"number\">\d+</td><td><bdi>(.*?)</bdi></td>.*</tr>", html
        )
        assert [name for name in rows if name != "broken.jdx"] == [
            run.entries[i].source for i in run.measured
        ]
        value, u = run.amounts.values[5, 0], run.amounts.standard_uncertainty[5, 0]
        assert plus_minus(1000 * float(value), 1000 * float(u)) in html

    def test_unreadable(self, run: Run, html: str) -> None:
        reason = next(e.reason for e in run.entries if e.state == "unreadable")
        assert reason in Page(html).text

    def test_remarks_grouped(self, run: Run) -> None:
        noticed = Remark("lines-broad", "The line is 9 Hz wide.", doubtful=True)
        entries = tuple(
            replace(e, remarks=(noticed,), state="doubtful") if i in (1, 2, 6) else e
            for i, e in enumerate(run.entries)
        )
        text = report_html(replace(run, entries=entries), MADE)
        assert re.search(
            r"Doubtful\.</strong> The line is 9 Hz wide\.</td>"
            r'<td class="number">3</td><td>2–3, 7</td>',
            text,
        )
        assert text.count("The line is 9 Hz wide.") == 1

    def test_wild_values(self, run: Run, html: str) -> None:
        """A doubtful spectrum with absurd amounts does not flatten the trend; it is counted."""
        entries = list(run.entries)
        wild = entries[9].integrals
        assert wild is not None
        values = np.array([1e-4 * wild.values[0], *wild.values[1:]])
        entries[9] = replace(entries[9], state="doubtful", integrals=replace(wild, values=values))
        text = report_html(replace(run, entries=tuple(entries)), MADE)
        assert "2 values of doubtful or set-aside spectra lie outside" in text
        assert "outside the picture" not in html
        ticks = [float(t.replace("−", "-")) for t in re.findall(r">(−?[\d.]+)</text>", text)]
        assert 300 < max(ticks) < 1000

    def test_long_run_is_thinned(self, run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
        """Of a long run the table keeps whatever is not plainly measured, and says so."""
        monkeypatch.setattr(report_record, "MOST_ROWS", 6)
        monkeypatch.setattr(report_figures, "MOST_BARS", 6)
        thinned = report_html(run, MADE)
        assert "Shown: 6 of 25 spectra, every 5th" in Page(thinned).text
        assert "broken.jdx" in thinned
        assert "data:image/png;base64," in thinned
        check_self_contained(Page(thinned))


class TestHostile:
    def test_inert(self, hostile: Run) -> None:
        page = Page(report_html(hostile, MADE))
        check_self_contained(page)
        text = page.text
        assert text.count(SCRIPT) > 8  # it is there, as text
        assert text.count(BREAKOUT) > 4
        assert text.count(MATHS) > 4
        assert "".join(page.pre) == hostile.sheet_text

    def test_decisions_shown(self, hostile: Run) -> None:
        text = Page(report_html(hostile, MADE)).text
        assert f"{COUNT - 1} measured, 0 doubtful, 1 set-aside" in text
        assert "The law second-order was chosen by" in text
        assert "The chain of their hashes is whole." in text

    def test_broken_chain(self, plain: Path, tmp_path: Path) -> None:
        logbook = tmp_path / "x.logbook"
        shutil.copytree(plain, logbook)
        with Record(logbook) as record:
            record.connection.execute("UPDATE decisions SET who = 'someone else' WHERE id = 1")
        assert "chain of decisions is broken at no. 1" in report_html(load_run(logbook), MADE)


class TestWithoutFit:
    def test_too_few(self, run: Run) -> None:
        few = replace(run, entries=run.entries[:1], timeline=run.timeline.ordered([0]))
        page = Page(report_html(few, MADE))
        assert "There is no fit, and so no rate constant." in page.text
        assert "wait for more spectra" in page.text
        assert "Amounts of the species against time" in str(page.tags)  # the trend is still drawn
        assert "Observed less fitted" not in str(page.tags)

    def test_nothing_measured(self, run: Run) -> None:
        bad = [i for i, e in enumerate(run.entries) if e.state == "unreadable"]
        none = replace(
            run, entries=tuple(run.entries[i] for i in bad), timeline=run.timeline.ordered(bad)
        )
        page = Page(report_html(none, MADE))
        assert "No spectrum has been measured that could be fitted." in page.text
        assert "No spectrum was measured." in page.text
        assert "broken.jdx" in page.text

    def test_all_set_aside(self, plain: Path, tmp_path: Path) -> None:
        logbook = tmp_path / "x.logbook"
        shutil.copytree(plain, logbook)
        with Record(logbook) as record:
            for entry in load_run(logbook).entries:
                decide(record.connection, who="R.", kind="set-aside", subject=entry.source,
                       new="out", why="magnet quenched")  # fmt: skip
        text = Page(report_html(load_run(logbook), MADE)).text
        assert "There is no fit" in text
        assert text.count("magnet quenched") == 2 * COUNT + 1

    def test_reference_lost(self, run: Run) -> None:
        """Rows whose reference is not above zero have no amounts, and are not fitted."""
        entries = []
        for number, entry in enumerate(run.entries):
            if entry.integrals is not None and number % 2:
                values = np.array(entry.integrals.values)
                values[0] = -1.0
                entries.append(replace(entry, integrals=replace(entry.integrals, values=values)))
            else:
                entries.append(entry)
        text = Page(report_html(replace(run, entries=tuple(entries)), MADE)).text
        assert f"weight 1.000 · {COUNT // 2} spectra" in text
        assert text.count("measured") > COUNT

    def test_trace_gone(self, run: Run, plain: Path, tmp_path: Path) -> None:
        logbook = tmp_path / "x.logbook"
        shutil.copytree(plain, logbook)
        (logbook / "traces.f32").unlink()
        text = Page(report_html(load_run(logbook), MADE)).text
        assert "They cannot be drawn" in text
        assert re.sub(r"\s", "", pretty(study_run(run).verdict)) in re.sub(r"\s", "", text)


class TestFile:
    def test_saved(self, run: Run, tmp_path: Path) -> None:
        path = tmp_path / "report.html"
        path.write_text("old")
        save_report(run, path)
        text = path.read_text(encoding="utf-8")
        assert text.startswith("<!DOCTYPE html>")
        assert text.endswith(("</html>", "</html>\n"))
        assert [p.name for p in tmp_path.iterdir()] == ["report.html"]

    def test_nothing_left_behind(self, run: Run, tmp_path: Path) -> None:
        (tmp_path / "taken").mkdir()
        with pytest.raises(InputError, match="cannot be written"):
            save_report(run, tmp_path / "taken")
        with pytest.raises(InputError, match="cannot be written"):
            save_report(run, tmp_path / "no" / "such.html")
        assert [p.name for p in tmp_path.iterdir()] == ["taken"]


@pytest.mark.browser
def test_in_a_browser(hostile: Run, tmp_path: Path, browser: Browser) -> None:
    """Opened and printed without script: nothing asked for, nothing wider than the paper."""
    path = tmp_path / "report.html"
    save_report(hostile, path)
    asked: list[str] = []
    page = browser.new_page(viewport={"width": 794, "height": 1123})
    page.on("request", lambda request: asked.append(request.url))
    page.goto(path.as_uri())
    assert page.title() != "owned"
    assert page.title().startswith("</title></style>")
    assert page.evaluate("document.documentElement.scrollWidth") <= 794
    assert page.locator("figure > svg").count() == 4
    boxes = [page.locator("figure > svg").nth(i).bounding_box() for i in range(4)]
    assert all(box is not None and box["height"] > 100 < box["width"] for box in boxes)
    for paper in ("A4", "Letter"):
        pdf = page.pdf(format=paper, prefer_css_page_size=True)
        assert 5 <= len(re.findall(rb"/Type /Page\b", pdf)) <= 14
    page.close()
    assert asked == [path.as_uri()]
