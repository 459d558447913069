"""What the documents say is so."""

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
MODULES = sorted((ROOT / "service" / "pinlight").rglob("*.py"))


def test_the_readme_begins_with_the_job_and_then_two_commands():
    assert README.split("\n\n")[1].startswith("People who observe with long-baseline")
    blocks = re.findall(r"^```sh\n(.*?)^```", README, re.MULTILINE | re.DOTALL)
    assert [block.strip().count("\n") for block in blocks[:2]] == [0, 0]
    assert blocks[0].strip().endswith("pinlight demo")
    assert blocks[1].strip().endswith("pytest")


def test_every_setting_is_in_the_readme():
    code = "\n".join(path.read_text(encoding="utf-8") for path in MODULES)
    settings = set(re.findall(r"\bPINLIGHT_[A-Z]+\b", code))
    assert settings
    for setting in settings:
        assert f"`{setting}`" in README


def test_every_constraint_is_a_plain_pin():
    lines = (ROOT / "constraints.txt").read_text(encoding="utf-8").splitlines()
    pins = [line for line in lines if line and not line.startswith("#")]
    for pin in pins:
        assert re.fullmatch(r"[A-Za-z0-9_.-]+==[0-9A-Za-z.]+", pin), pin
    project = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    names = {pin.split("==")[0].lower().replace("_", "-") for pin in pins}
    for wanted in re.findall(r'^    "([A-Za-z0-9_-]+)>=', project, re.MULTILINE):
        assert wanted.lower().replace("_", "-") in names, wanted


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT / "service")))
def test_every_module_says_what_it_is_and_lists_its_public_names(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert ast.get_docstring(tree)
    public = {
        node.name
        for node in tree.body
        if isinstance(node, ast.ClassDef | ast.FunctionDef) and not node.name.startswith("_")
    }
    listed = next(
        (
            {element.value for element in node.value.elts}
            for node in tree.body
            if isinstance(node, ast.Assign) and getattr(node.targets[0], "id", "") == "__all__"
        ),
        set(),
    )
    if path.name in (
        "models.py", "http.py", "page.py", "night.py", "vo.py", "cli.py", "openapi.py", "records.py", "team.py",
    ):  # fmt: skip
        return  # their public names are routes, commands and the parts of answers
    assert public <= listed, f"not in __all__: {public - listed}"
    for node in ast.walk(tree):
        if isinstance(node, ast.ClassDef | ast.FunctionDef) and node.name in listed:
            assert ast.get_docstring(node), f"{node.name} has no docstring"


def test_the_developers_guide_names_every_package_and_every_reason():
    from pinlight.ranking.gates import REASONS

    for package in (ROOT / "service" / "pinlight").iterdir():
        if package.is_dir() and (package / "__init__.py").exists():
            assert f"{package.name}/" in DEVELOPERS, package.name
    for reason in REASONS:
        assert f"`{reason}`" in DEVELOPERS, reason


def test_the_developers_guide_explains_every_key_of_the_array_file():
    text = (ROOT / "seed_catalog" / "arrays" / "north.toml").read_text(encoding="utf-8")
    for key in set(re.findall(r"^(\w+) =", text, re.MULTILINE)):
        assert f"`{key}`" in DEVELOPERS, key
