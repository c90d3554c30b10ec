"""The README says what is true: its commands exist, its table has every key, its sheet is right."""

import re
import tomllib
from pathlib import Path
from typing import Any, get_args

import pytest
from pydantic import BaseModel

from kinetics.sheet import NOT_BUILT, Sheet, parse_sheet
from tests.command import ROOT, kinetics

README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def keys_of(model: type[BaseModel]) -> set[str]:
    found: set[str] = set()
    for name, field in model.model_fields.items():
        inner = _model_in(field.annotation)
        found |= {name} if inner is None else keys_of(inner)
    return found


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((m for part in get_args(annotation) if (m := _model_in(part))), None)


def test_every_key_of_the_sheet_is_explained() -> None:
    words = set(re.findall(r"`([a-z0-9_]+)`", README))
    refused = {path.partition("=")[0].split(".")[-1] for path in NOT_BUILT}
    inside = {"n", "hz", "log", "place"}  # of tables shown as a whole, or refused as a whole
    assert keys_of(Sheet) - words - refused - inside == set()


def test_every_refused_key_is_named_as_a_limit() -> None:
    limits = README.split("## Limits")[1].split("## ")[0]
    for path in NOT_BUILT:
        assert path.partition("=")[0].split(".")[-1] in limits


def test_the_sheet_in_the_readme_is_right() -> None:
    block = re.search(r"^       \[reference\]\n(?:       .*\n|\n)+", README, re.MULTILINE)
    assert block is not None
    text = "\n".join(line.strip() for line in block.group().splitlines())
    assert tomllib.loads(text)
    assert parse_sheet(text, "README.md").species == ("acetal",)


@pytest.mark.parametrize(
    "name", ["check", "plan", "watch", "fit", "table", "report", "compare", "verify", "copy"]
)
def test_commands_exist_and_are_told_of(name: str) -> None:
    done = kinetics(name, "--help")
    assert done.returncode == 0
    assert f"kinetics {name}" in done.stdout
    assert f"{name}" in README


def test_files_and_options_named_in_the_guides_exist() -> None:
    for text in (README, DEVELOPERS):
        for path in re.findall(r"\]\(([^)#]+)\)", text):
            assert (ROOT / path).exists(), path
    tops = ("kinetics", "tests", "dashboard", "demo_runs")
    inner = ("spectra", "signals", "rates", "logbook")
    for path in re.findall(rf"`((?:{'|'.join(tops + inner)})/[^`]+)`", DEVELOPERS):
        name = path if path.split("/")[0] in tops else f"kinetics/{path}"
        name = name.removesuffix("/")
        # `spectra/processing.process` names a function in a file.
        file, _, function = name.rpartition(".")
        if function not in ("py", "") and (ROOT / f"{file}.py").is_file():
            assert f"def {function}(" in (ROOT / f"{file}.py").read_text(encoding="utf-8"), path
        else:
            assert (ROOT / name).exists() or (ROOT / f"{name}.py").is_file(), path


def test_one_test_command_that_ci_takes_from_the_readme() -> None:
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    pattern = re.search(r"s/\^    (.*)\$/", script)
    assert pattern is not None
    lines = [line for line in README.splitlines() if re.match(r"^    .*pytest", line)]
    assert len(lines) == 1
    assert "-e '.[dev]'" in lines[0]


def test_no_path_of_a_machine_and_no_registry_host() -> None:
    for path in Path(ROOT).rglob("*"):
        relative = path.relative_to(ROOT).parts
        if path.suffix not in (".py", ".md", ".toml", ".txt", ".js", ".j2") or relative[0] in (
            ".venv",
            ".git",
            "build",
        ):
            continue
        text = path.read_text(encoding="utf-8")
        assert not re.search(r"(?<![\w.])/(root|work|farm)/", text), path
        assert not re.search(
            r"https?://(pypi|files\.pythonhosted|deb\.debian|registry\.npm)", text
        ), path
