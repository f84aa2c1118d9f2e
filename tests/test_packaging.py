"""The wheel holds what the checkout holds, and the README shows what works."""

import ast
import re
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import idlearn

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
SETUP = PROJECT["tool"]["setuptools"]
README = (ROOT / "README.md").read_text(encoding="utf-8")
MAPPED = ("envs", "baselines", "reports")


def modules() -> Iterator[tuple[str, Path]]:
    """Yield (package, file) of every module under the package's folders, each once."""
    for base in ("idlearn", *MAPPED):
        for path in sorted((ROOT / base).rglob("*.py")):
            folder = path.parent.relative_to(ROOT)
            if not any((ROOT / p).is_symlink() for p in (folder, *folder.parents)):
                name = ".".join(folder.parts)
                yield (name if base == "idlearn" else f"idlearn.{name}"), path


def names(requirements: list[str]) -> set[str]:
    """Return the distributions that requirements name, in lower case with hyphens."""
    return {re.split(r"[<>=!~\[;@ ]", r)[0].lower().replace("_", "-") for r in requirements}


def test_every_package_is_listed() -> None:
    folders = {package for package, path in modules() if path.name == "__init__.py"}
    assert set(SETUP["packages"]) == folders
    assert len(SETUP["packages"]) == len(folders)


def test_no_module_lies_outside_a_listed_package() -> None:
    """A module in a folder without `__init__.py` imports in a checkout and lacks in the wheel."""
    assert [p for package, p in modules() if package not in SETUP["packages"]] == []


def test_mapped_folders_exist_and_are_linked_into_the_checkout() -> None:
    for package, folder in SETUP["package-dir"].items():
        assert (ROOT / folder / "__init__.py").is_file()
        assert (ROOT / package.replace(".", "/")).resolve() == ROOT / folder


def test_every_other_file_is_package_data() -> None:
    """What is no module reaches the wheel only if a pattern names it."""
    assert SETUP["include-package-data"] is False
    listed = set()
    for package, patterns in SETUP["package-data"].items():
        folder = ROOT / SETUP["package-dir"].get(package, package.replace(".", "/"))
        for pattern in patterns:
            found = set(folder.glob(pattern))
            assert found, f"{package}: nothing is called {pattern}"
            listed |= found
    folders = {path.parent for _, path in modules()}
    there = {p for folder in folders for p in folder.iterdir() if p.is_file()}
    assert {p for p in there if p.suffix not in (".py", ".pyc")} == listed


def test_the_version_is_one() -> None:
    assert PROJECT["project"]["version"] == idlearn.__version__


def test_the_telephony_package_is_never_asked_for() -> None:
    """PyPI's `sippy` is a telephony stack; the identification library is `sippy-unipi`."""
    wanted = [*PROJECT["project"]["dependencies"]]
    for extra in PROJECT["project"]["optional-dependencies"].values():
        wanted += extra
    assert "sippy" not in names(wanted)
    assert "sippy-unipi" in names(wanted)


def test_what_the_package_imports_is_declared() -> None:
    """A package that another one happens to bring along may be gone with its next release."""
    roots = set()
    for _, path in modules():
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Import):
                roots |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and node.module:
                roots.add(node.module.split(".")[0])
    foreign = {r for r in roots if r not in sys.stdlib_module_names and r != "idlearn"}
    assert "numpy" in foreign
    called = {"sklearn": "scikit-learn"}
    assert {called.get(r, r) for r in foreign} <= names(PROJECT["project"]["dependencies"])


def test_the_sheet_of_the_readme_is_right(tmp_path: Path) -> None:
    from idlearn.study import read_sheet

    (block,) = re.findall(r"```toml\n(.*?)```", README, re.DOTALL)
    (tmp_path / "loop.toml").write_text(block, encoding="utf-8")
    sheet = read_sheet(tmp_path / "loop.toml")
    assert sheet.incumbent is not None
    assert [len(c.terms) for c in sheet.costs] == [2]
    assert len(sheet.scenarios) == 1


def test_the_python_of_the_readme_names_what_exists() -> None:
    from importlib import import_module

    (block,) = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    taken = [n for n in ast.parse(block).body if isinstance(n, ast.ImportFrom)]
    assert taken
    for node in taken:
        module = import_module(node.module or "")
        assert [a.name for a in node.names if not hasattr(module, a.name)] == []
