"""Hold the rules of the house: who may import whom, how large things get, where strings and TOML live."""

import ast
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent

# A part of emu/ imports only from parts with a lower number, or from itself. Parts of one number do
# not know each other.
LAYERS = {
    "errors": 0,
    "configs": 1,
    "processes": 1,
    "units": 2,
    "spacetime": 3,
    "raymap": 4,
    "source": 4,
    "arrival": 5,
    "assemble": 6,
    "families": 7,
    "observe": 8,
    "evaluate": 9,
    "problem": 9,
    "inference": 10,
    "bundle": 11,
    "report": 12,
    "console": 13,
    "cli": 14,
}
# A campaign carries nuisance parameters, so it may know what a parameter and a prior are, but no family.
SEEN_BY_OBSERVE = ("emu.families.density", "emu.families.parameters", "emu.families.prior")
HEAVY = (
    "arviz",
    "astropy",
    "dynesty",
    "matplotlib",
    "numba",
    "sbi",
    "scipy",
    "sklearn",
    "torch",
    "xarray",
    "zarr",
)
MOST_LINES, MOST_FUNCTION_LINES, MOST_NAMES = 400, 40, 5

MODULES = sorted([*(ROOT / "emu").rglob("*.py"), *(ROOT / "training").rglob("*.py")])
each_module = pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))


def dotted(path: Path) -> str:
    """Return the name a file is imported by."""
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def part(module: str) -> str:
    """Return the part of emu a module belongs to: `emu.source.light` -> `source`."""
    return module.split(".")[1]


def imported(path: Path) -> list[str]:
    """List all modules a file imports anywhere in it, functions and type checking included."""
    names = []
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}, line {node.lineno}: import by the full name"
            below = [f"{node.module}.{alias.name}" for alias in node.names]
            names += below if node.module in PACKAGES else [str(node.module)]
    return names


def code_lines(function: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """Count the lines of a function without its decorators and docstring."""
    lines = (function.end_lineno or function.lineno) - function.lineno + 1
    first = function.body[0]
    if ast.get_docstring(function) is not None:
        lines -= (first.end_lineno or first.lineno) - first.lineno + 1
    return lines


def declared_names(tree: ast.Module) -> list[str] | None:
    """Return the names of a literal `__all__`, or None where there is none."""
    for node in tree.body:
        if isinstance(node, ast.Assign) and any(getattr(t, "id", "") == "__all__" for t in node.targets):
            return list(ast.literal_eval(node.value))
    return None


def closed_parts(tree: ast.Module) -> set[str]:
    """Return the functions and classes of a module that its `__all__` does not offer."""
    parts = {node.name for node in tree.body if isinstance(node, ast.FunctionDef | ast.ClassDef)}
    return parts - set(declared_names(tree) or ())


PACKAGES = {dotted(path) for path in MODULES if path.name == "__init__.py"}
CLOSED = {dotted(path): closed_parts(ast.parse(path.read_text())) for path in MODULES}


def test_every_part_of_emu_has_a_layer() -> None:
    parts = {part(dotted(path)) for path in MODULES if dotted(path).startswith("emu.")}
    assert parts <= set(LAYERS), f"give these a number in LAYERS: {sorted(parts - set(LAYERS))}"


@each_module
def test_imports_point_downwards(path: Path) -> None:
    module = dotted(path)
    if not module.startswith("emu."):
        return
    own = part(module)
    for name in imported(path):
        assert name.split(".")[0] != "training", f"{module} imports {name}: emu never imports training"
        if not name.startswith("emu.") or name == "emu.__version__" or part(name) == own:
            continue
        assert LAYERS[part(name)] < LAYERS[own], f"{module} imports {name}, which is not below it"
        if own == "observe" and part(name) == "families":
            assert name.startswith(SEEN_BY_OBSERVE), f"{module} imports {name}: observe knows no family"


@each_module
def test_training_leaves_the_command_lines_alone(path: Path) -> None:
    module = dotted(path)
    if module.startswith("training") and module != "training.cli":
        assert not {"emu.cli", "emu.console", "training.cli"} & set(imported(path)), module


@each_module
def test_no_module_of_emu_imports_its_public_face(path: Path) -> None:
    # `import emu` inside emu would be a circle; the names behind it live in the modules themselves.
    if dotted(path).startswith("emu."):
        assert "emu" not in imported(path), dotted(path)


def test_layers_are_noticed_when_broken(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    bad = tmp_path / "emu" / "source" / "bad.py"
    bad.parent.mkdir(parents=True)
    bad.write_text("def late():\n    from emu.report import answer\n    return answer\n")
    monkeypatch.setattr(sys.modules[__name__], "ROOT", tmp_path)
    with pytest.raises(AssertionError, match="not below it"):
        test_imports_point_downwards(bad)


@each_module
def test_sizes(path: Path) -> None:
    text = path.read_text()
    assert len(text.splitlines()) <= MOST_LINES, f"{path.relative_to(ROOT)}: more than {MOST_LINES} lines"
    long = [
        f"{node.name} ({code_lines(node)})"
        for node in ast.walk(ast.parse(text))
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef) and code_lines(node) > MOST_FUNCTION_LINES
    ]
    assert not long, f"{path.relative_to(ROOT)}: functions of more than {MOST_FUNCTION_LINES} lines: {long}"


@each_module
def test_public_names(path: Path) -> None:
    tree = ast.parse(path.read_text())
    names = declared_names(tree)
    if path.name in ("__init__.py", "__main__.py") and names is None:
        return
    assert names is not None, f"{path.relative_to(ROOT)}: no __all__"
    assert len(names) <= MOST_NAMES, f"{path.relative_to(ROOT)}: more than {MOST_NAMES} public names"
    first = next((n.lineno for n in tree.body if isinstance(n, ast.FunctionDef | ast.ClassDef)), None)
    place = next(n.lineno for n in tree.body if "__all__" in ast.unparse(n))
    assert first is None or place < first, f"{path.relative_to(ROOT)}: __all__ stands at the top"


@each_module
def test_only_public_parts_are_imported_elsewhere(path: Path) -> None:
    # Constants and type aliases may travel; functions and classes only where __all__ offers them.
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom) and node.module in CLOSED:
            closed = {alias.name for alias in node.names} & CLOSED[node.module]
            assert not closed, f"{path.relative_to(ROOT)}: {closed} not in __all__ of {node.module}"


@each_module
def test_no_asserts_pickles_or_drawers(path: Path) -> None:
    assert path.name != "utils.py", f"{path}: name a file by its one concept"
    tree = ast.parse(path.read_text())
    assert not any(isinstance(node, ast.Assert) for node in ast.walk(tree)), f"{path}: raise, do not assert"
    assert not {"pickle", "cloudpickle", "dill", "joblib"} & set(imported(path)), f"{path}: nothing is pickled"


def test_toml_lives_in_configs_only() -> None:
    found = [p for top in ("emu", "training", "tests", "scripts") for p in (ROOT / top).rglob("*.toml")]
    assert not found, f"TOML belongs into configs/: {found}"


def test_the_guide_leads_to_every_page() -> None:
    guide = ROOT / "emu" / "guide"
    links = set(re.findall(r"\]\(([^)#]+\.md)", (guide / "index.md").read_text()))
    assert links == {path.name for path in guide.glob("*.md")} - {"index.md"}


def test_tests_mirror_the_rooms() -> None:
    rooms = {path.name for path in (ROOT / "emu").iterdir() if (path / "__init__.py").exists()}
    rooms |= {path.name for path in (ROOT / "training").iterdir() if (path / "__init__.py").exists()}
    bare = {path.parent for path in MODULES} - {path.parent for path in MODULES if path.name == "__init__.py"}
    assert not bare, f"no __init__.py in {bare}"
    tested = {path.relative_to(ROOT / "tests").parts[0] for path in (ROOT / "tests").rglob("test_*.py")}
    folders = {name for name in tested if not name.endswith(".py")}
    assert folders <= rooms | {"training", "contracts", "reference"}, "a folder of tests without a room"
    assert rooms <= folders, f"rooms without tests: {sorted(rooms - folders)}"


@pytest.mark.parametrize("command", ["emu.cli", "training.cli"])
def test_help_imports_nothing_heavy(command: str) -> None:
    script = f"""
import sys
from {command} import main
sys.argv = ["x", "--help"]
try:
    main()
except SystemExit as end:
    assert end.code == 0, end.code
print("HEAVY", *(set({HEAVY!r}) & set(sys.modules)))
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "HEAVY", done.stdout.splitlines()[-1]
