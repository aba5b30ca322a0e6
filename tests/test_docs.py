"""What the documentation shows is what the tool does today."""

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from embersift.cli import app
from embersift.docs_pages import pages

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(kind, name):
    """A fenced block of the README by the comment above it."""
    found = re.search(rf"<!-- {kind}: {re.escape(name)} -->\s*```\w*\n(.*?)```", README, re.S)
    assert found, f"README has no block {kind}: {name}"
    return found[1]


@pytest.mark.parametrize("name", sorted(pages()))
def test_a_page_made_from_declarations_is_fresh(name):
    made = pages()[name]
    assert (ROOT / "docs" / name).read_text(encoding="utf-8") == made, (
        "run: python -m embersift.docs_pages docs"
    )


def test_the_readme_begins_with_the_job_in_one_paragraph():
    title, job, *_ = re.split(r"\n\s*\n", README)
    assert title.startswith("# embersift")
    assert "X-ray" in job
    assert "AGN" in job


def test_the_readme_shows_what_the_demo_prints(tmp_path, monkeypatch):
    words = shlex.split(block("run", "demo").split("&&")[-1])
    assert words[0].endswith("embersift")
    monkeypatch.chdir(ROOT)
    out = tmp_path / "tern_shoal.screened.ecsv"
    result = CliRunner().invoke(app, [*words[1:], "--out", str(out)], env={"COLUMNS": "80"})
    assert result.exit_code == 0, result.output
    printed = result.output.replace(str(out), "demo_catalog/tern_shoal.screened.ecsv")
    assert printed.strip() == block("output", "demo").strip()


def test_the_worked_example_of_the_readme_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    for name in ("simulation.csv", "simulation.toml"):
        Path(name).write_text(block("file", name))
    for line in block("run", "own").strip().splitlines():
        result = CliRunner().invoke(app, shlex.split(line)[1:])
        assert result.exit_code == 0, result.output
    for line in block("run", "look").strip().splitlines():
        result = CliRunner().invoke(app, shlex.split(line)[1:])
        assert result.exit_code == 0, result.output
    text = Path("simulation.screened.csv").read_text()
    assert text.splitlines()[1].startswith("007,")


def test_python_in_the_readme_runs(tmp_path):
    code = re.search(r"<!-- python -->\s*```python\n(.*?)```", README, re.S)
    assert code
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code[1]], capture_output=True, text=True, cwd=tmp_path
    )
    assert done.returncode == 0, done.stderr
    assert "visible" in done.stdout


def test_links_between_pages_lead_somewhere():
    for page in [ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").glob("*.md")]:
        for target in re.findall(r"\]\(([^)#]+)\)", page.read_text(encoding="utf-8")):
            if not target.startswith("http"):
                assert (page.parent / target).exists(), f"{page.name}: {target}"


def test_every_command_is_in_the_readme_or_the_docs():
    written = README + "".join(p.read_text(encoding="utf-8") for p in (ROOT / "docs").glob("*.md"))
    for command in app.registered_commands:
        assert command.callback is not None
        name = command.name or command.callback.__name__
        assert f"embersift {name}" in written, name


def test_own_laws_of_the_docs_are_accepted(tmp_path):
    text = (ROOT / "docs" / "choosing-laws.md").read_text(encoding="utf-8")
    for number, toml in enumerate(re.findall(r"```toml\n(.*?)```", text, re.S)):
        path = tmp_path / f"{number}.toml"
        path.write_text(toml)
        out = tmp_path / f"{number}.csv"
        words = ["screen", str(ROOT / "demo_catalog" / "tern_shoal.csv"), "--recipe", str(path)]
        result = CliRunner().invoke(app, [*words, "--out", str(out), "--quiet"])
        assert result.exit_code == 0, result.output + result.stderr
