"""What stands at the top of the tree, and what must not stand anywhere in it."""

import re
import subprocess
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "service", "budgets", "tests", "openapi.yaml"}


def tracked() -> list[str]:
    if not (ROOT / ".git").exists():
        pytest.skip("not a git checkout: there is no list of the files that belong to the project")
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True)
    return listed.stdout.splitlines()


def test_the_top_level_holds_what_the_customer_fixed_and_dotfiles() -> None:
    found = {name.split("/")[0] for name in tracked()}
    assert {name for name in found if not name.startswith(".")} == TOP_LEVEL


def test_no_file_names_a_module_for_everything() -> None:
    names = {Path(name).stem for name in tracked() if name.endswith(".py")}
    assert not names & {"utils", "common", "manager", "handler", "handlers", "misc"}


def test_no_file_names_a_folder_of_a_machine() -> None:
    pattern = re.compile(r"(?<![\w.])/(?:work|root|home/\w+|opt/wheels)/")
    for name in tracked():
        path = ROOT / name
        if path.suffix in {".py", ".md", ".toml", ".yaml", ".html", ".css", ".csv", ".mako", ".sql"}:
            found = pattern.search(path.read_text("utf-8"))
            assert found is None, f"{name}: {found}"


def test_the_readme_opens_with_one_paragraph_and_two_commands_of_one_line() -> None:
    text = (ROOT / "README.md").read_text("utf-8")
    blocks = re.findall(r"```\w*\n(.*?)```", text, re.S)[:2]
    for block in blocks:
        (line,) = [line for line in block.splitlines() if line.strip()]
        assert line.startswith("python3 -m venv ")
    assert "shoalmark demo" in blocks[0]
    assert "pytest" in blocks[1]
    opening = text.split("\n\n")[1]
    assert not opening.startswith(("#", "```", "-", "|"))
    assert len(opening.split()) > 40


def test_every_requirement_is_bounded_on_both_sides() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["project"]
    extras = [each for some in project["optional-dependencies"].values() for each in some]
    for requirement in (*project["dependencies"], *extras):
        if not requirement.startswith("shoalmark["):
            assert re.fullmatch(r"[\w\[\]-]+>=[\d.]+,<[\d.]+", requirement), requirement
