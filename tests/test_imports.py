"""The walls of the package: what may import what, read from the source by ast. DEVELOPERS.md says why."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "sweep"

# A module, or a package as a whole, imports from rows above its own only.
LEVELS = (
    ("errors", "result"),
    ("frames", "station"),
    ("optics", "measure", "ring", "sheet"),
    ("cameras", "recording", "lens"),
    ("readings", "choose", "fit"),
    ("light", "figures", "outlook"),
    ("notices", "verdict"),
    ("analyse", "capture", "framing", "probe"),
    ("forecast", "report", "screens", "demo", "record", "frame"),
    ("cli",),
    ("__main__",),
)
LEVEL_OF = {name: level for level, row in enumerate(LEVELS) for name in row}

# No file, device, screen or clock in these.
PURE = {
    "errors", "station", "frames", "result", "optics", "lens", "measure", "ring", "readings", "fit", "choose",
    "light", "figures", "outlook", "notices", "verdict", "analyse", "forecast", "probe",
}  # fmt: skip
IMPURE_IMPORTS = {
    "asyncio", "datetime", "glob", "io", "logging", "multiprocessing", "os", "pathlib", "random", "shutil", "socket",
    "subprocess", "sys", "tempfile", "threading", "time", "rich", "starlette", "tifffile", "typst", "uvicorn",
}  # fmt: skip
ONLY_IN = {
    "matplotlib": ("report/", "sheet/draw.py"),
    "click": ("cli.py",),
    "typst": ("report/", "sheet/"),
    "starlette": ("screens/",),
    "uvicorn": ("screens/",),
    "rich": ("screens/", "cli.py"),
    "tifffile": ("recording/",),
    "ctypes": ("cameras/",),
}

FILES = sorted(PACKAGE.rglob("*.py"))


def test_every_module_has_a_level():
    assert {unit(file) for file in FILES} - {"__init__"} == set(LEVEL_OF)


@pytest.mark.parametrize("file", FILES, ids=lambda f: f.relative_to(PACKAGE).as_posix())
def test_a_module_imports_from_lower_levels_only(file):
    own = unit(file)
    if own == "__init__":
        assert not inner_imports(file)
        return
    for name in inner_imports(file):
        assert name == own or LEVEL_OF[name] < LEVEL_OF[own], f"{own} imports {name}"


@pytest.mark.parametrize("file", FILES, ids=lambda f: f.relative_to(PACKAGE).as_posix())
def test_outside_packages_stay_behind_their_walls(file):
    place = file.relative_to(PACKAGE).as_posix()
    for name in outer_imports(file):
        top = name.split(".")[0]
        assert "pyplot" not in name
        if top in ONLY_IN:
            assert place.startswith(ONLY_IN[top]), f"{place} imports {name}"


@pytest.mark.parametrize(
    "file", [f for f in FILES if f.name != "__init__.py" or f.parent != PACKAGE], ids=lambda f: f.stem
)
def test_pure_modules_touch_nothing_outside(file):
    if unit(file) not in PURE:
        return
    assert not {name.split(".")[0] for name in outer_imports(file)} & IMPURE_IMPORTS
    called = {n.func.id for n in ast.walk(tree(file)) if isinstance(n, ast.Call) and isinstance(n.func, ast.Name)}
    assert not called & {"open", "print", "input"}


def unit(file: Path) -> str:
    """The module or package right below sweep/ that a file belongs to."""
    first = file.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def tree(file: Path) -> ast.Module:
    return ast.parse(file.read_text(encoding="utf-8"))


def imported(file: Path) -> list[str]:
    """Dotted names of all imports, those inside functions too."""
    names = []
    for node in ast.walk(tree(file)):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file} imports relatively"
            # `from sweep import x` names the module x; `from sweep.x import y` names sweep.x.
            names += [f"sweep.{a.name}" for a in node.names] if node.module == "sweep" else [str(node.module)]
    return names


def inner_imports(file: Path) -> set[str]:
    found = {name.split(".")[1] for name in imported(file) if name.startswith("sweep.")}
    return found - {"__version__"}


def outer_imports(file: Path) -> set[str]:
    return {name for name in imported(file) if name.split(".")[0] != "sweep"}
