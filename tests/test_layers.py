"""Imports run to the left only; the order is that of DEVELOPERS.md."""

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
BOTTOM = ("errors", "seeding", "budget", "search", "cost", "control")
ORDER = (
    BOTTOM,
    ("logs",),
    ("models",),
    ("identification",),
    ("envs",),
    ("baselines", "learning"),
    ("comparison",),
    ("reports",),
    ("study",),
    ("cli",),
)
LEVEL = {name: i for i, group in enumerate(ORDER) for name in group}
FORBIDDEN = {"utils", "helpers", "misc", "common"}


def sources() -> Iterator[tuple[str, Path]]:
    """Yield (layer, file) of every module, each once."""
    for path in sorted((ROOT / "idlearn").glob("*.py")):
        if path.name != "__init__.py":
            yield path.stem, path
    for folder in sorted(p for p in (ROOT / "idlearn").iterdir() if p.is_dir()):
        if folder.is_symlink() or folder.name == "__pycache__":
            continue
        yield from ((folder.name, p) for p in sorted(folder.rglob("*.py")))
    for name in ("envs", "baselines", "reports"):
        yield from ((name, p) for p in sorted((ROOT / name).rglob("*.py")))


def only_for_types(test: ast.expr) -> bool:
    """Return whether a condition is TYPE_CHECKING itself, not something made of it."""
    return (isinstance(test, ast.Name) and test.id == "TYPE_CHECKING") or (
        isinstance(test, ast.Attribute) and test.attr == "TYPE_CHECKING"
    )


def by_name(node: ast.Call) -> str | None:
    """Return the module that a call of import_module or __import__ names, if it names one."""
    called = (
        node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
    )
    if called in ("import_module", "__import__") and node.args:
        first = node.args[0]
        if isinstance(first, ast.Constant) and isinstance(first.value, str):
            return first.value
    return None


def imported(tree: ast.AST) -> Iterator[str]:
    """Yield every imported module name, those inside functions too, TYPE_CHECKING left out."""
    for node in ast.iter_child_nodes(tree):
        if isinstance(node, ast.If) and only_for_types(node.test):
            for other in node.orelse:
                yield from imported(ast.Module([other], []))
        elif isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute"
            if node.module == "idlearn":
                # the root's names are lazy and may lead anywhere
                yield from (f"idlearn:{alias.name}" for alias in node.names)
            else:
                yield node.module or ""
        else:
            if isinstance(node, ast.Call) and (name := by_name(node)):
                yield name
            yield from imported(node)


def faults(layer: str, tree: ast.AST) -> list[str]:
    """Return what a module of a layer imports although it must not."""
    found = []
    for name in imported(tree):
        if name == "idlearn" or name.startswith("idlearn:"):
            if name != "idlearn:__version__":
                found.append(f"{layer} imports {name} from the root; name the layer")
            continue
        parts = name.split(".")
        if parts[0] != "idlearn":
            continue
        other = parts[1]
        if other not in LEVEL:
            found.append(f"{name} is no layer")
        elif other != layer and (
            LEVEL[other] > LEVEL[layer] or (LEVEL[other] == LEVEL[layer] and layer not in BOTTOM)
        ):
            found.append(f"{layer} imports {name}")
    return found


def test_imports_run_to_the_left() -> None:
    found = []
    for layer, path in sources():
        assert layer in LEVEL, f"{path} belongs to no layer"
        found += [f"{path}: {f}" for f in faults(layer, ast.parse(path.read_text()))]
    assert found == []


def test_the_root_is_lazy() -> None:
    tree = ast.parse((ROOT / "idlearn" / "__init__.py").read_text())
    names = {n for n in imported(tree) if re.split("[.:]", n)[0] == "idlearn"}
    assert names == set()


def test_no_module_has_a_name_that_says_nothing() -> None:
    assert {p for _, p in sources() if FORBIDDEN & {p.stem, p.parent.name}} == set()


def test_every_layer_is_there() -> None:
    """The walk over the sources reaches all of them, so that a clean result means something."""
    assert {layer for layer, _ in sources()} == set(LEVEL)


@pytest.mark.parametrize(
    ("layer", "text"),
    [
        ("logs", "from idlearn.models import Ensemble"),
        ("baselines", "def f():\n    from idlearn.learning import residual"),
        ("learning", "import idlearn.baselines.pid"),
        ("envs", "from idlearn import study"),
        ("study", "from idlearn import identify"),
        ("study", "import idlearn"),
        ("cost", "import idlearn.logs as logs"),
        ("logs", "class A:\n    def f(self):\n        import idlearn.study"),
        ("logs", "try:\n    import idlearn.study\nexcept ImportError:\n    pass"),
        ("logs", "if not TYPE_CHECKING:\n    import idlearn.study"),
        ("logs", "if TYPE_CHECKING or True:\n    import idlearn.study"),
        ("logs", "if TYPE_CHECKING:\n    pass\nelse:\n    import idlearn.study"),
        ("logs", "import importlib\nimportlib.import_module('idlearn.study')"),
        ("models", "import idlearn.tools"),
    ],
)
def test_a_planted_violation_is_caught(layer: str, text: str) -> None:
    assert len(faults(layer, ast.parse(text))) == 1


def test_what_is_allowed_is_not_caught() -> None:
    text = "from idlearn import __version__\nfrom idlearn.errors import InputError\nimport numpy"
    assert faults("study", ast.parse(text)) == []
    checked = "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    import idlearn.study"
    assert faults("logs", ast.parse(checked)) == []
    assert faults("search", ast.parse("from idlearn.budget import Budget")) == []
    assert faults("learning", ast.parse("from idlearn.learning import residual")) == []
