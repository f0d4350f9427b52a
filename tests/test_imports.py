"""The rooms import one way, heavy libraries wait until they are needed, and the face stays light."""

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOMS = ("elastic", "description", "response", "inference", "study", "report")
REPORT = {"report", "plot", "__main__"}
HEAVY = (
    *("matplotlib", "corner", "arviz", "emcee", "xarray", "pandas", "h5netcdf", "h5py", "tqdm"),
    "scipy.stats",
)
PACKAGE = Path(__file__).parent.parent / "inverse"


def module_name(path: Path, package: Path) -> str:
    """Dotted name of a source file, e.g. `inverse.response.light`."""
    parts = path.relative_to(package.parent).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def room(module: str) -> str | None:
    """Room a module of the package belongs to; None for the package's face, which may name every room."""
    if module == "inverse":
        return None
    top = module.split(".")[1]
    if top in REPORT:
        return "report"
    if top in ROOMS:
        return top
    raise LookupError(f"{module} stands in no room: give it one at the top of tests/test_imports.py")


def imported(node: ast.AST, path: Path, package: Path) -> list[str]:
    """Dotted names one statement imports, relative ones resolved; a submodule is named, not its package."""
    if isinstance(node, ast.Import):
        return [alias.name for alias in node.names]
    if not isinstance(node, ast.ImportFrom):
        return []
    base = node.module or ""
    if node.level:
        folder = path.parents[node.level - 1].relative_to(package.parent)
        base = ".".join([*folder.parts, *filter(None, [node.module])])
    return [_deepest(base, alias.name, package) for alias in node.names]


def _deepest(base: str, name: str, package: Path) -> str:
    target = package.parent.joinpath(*base.split("."), name)
    is_module = target.is_dir() or target.with_suffix(".py").is_file()
    external = base.split(".")[0] != package.name
    return f"{base}.{name}" if is_module or external else base


def wrong_way(package: Path) -> Iterator[str]:
    """Every import, at any depth of the source, of a room to the right or of the face."""
    for path in sorted(package.rglob("*.py")):
        module = module_name(path, package)
        here = room(module)
        if here is None:
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            for target in imported(node, path, package):
                if target.split(".")[0] == package.name and not _allowed(module, here, target):
                    yield f"{module} imports {target}"


def _allowed(module: str, here: str, target: str) -> bool:
    there = room(target)
    if there is None:  # the face stands right of everything; only the command line looks at it
        return module == "inverse.__main__"
    return ROOMS.index(there) <= ROOMS.index(here)


def at_import(node: ast.AST) -> Iterator[ast.AST]:
    """Nodes that run when the module is imported: not function bodies, not `if TYPE_CHECKING`."""
    for child in ast.iter_child_nodes(node):
        if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            continue
        if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test):
            continue
        yield child
        yield from at_import(child)


def heavy_at_import(package: Path) -> Iterator[str]:
    """Every heavy library that a module loads when it is itself imported."""
    for path in sorted(package.rglob("*.py")):
        for node in at_import(ast.parse(path.read_text(encoding="utf-8"))):
            for target in imported(node, path, package):
                if any(f"{target}.".startswith(f"{library}.") for library in HEAVY):
                    yield f"{module_name(path, package)} imports {target}"


def run_python(code: str) -> str:
    """Standard output of `code` in an interpreter of its own that finds this tree's package."""
    command = [sys.executable, "-c", code]
    return subprocess.run(command, cwd=PACKAGE.parent, check=True, capture_output=True, text=True).stdout


def write_tree(folder: Path, sources: dict[str, str]) -> Path:
    """Lay out an invented package to try the checks on."""
    package = folder / "inverse"
    for name, source in {"__init__.py": "", **sources}.items():
        target = package / name
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_text(source, encoding="utf-8")
    return package


def test_rooms_import_one_way() -> None:
    assert list(PACKAGE.rglob("*.py"))
    assert list(wrong_way(PACKAGE)) == []


def test_heavy_libraries_are_imported_inside_functions() -> None:
    assert list(heavy_at_import(PACKAGE)) == []


@pytest.mark.parametrize(
    ("name", "source", "found"),
    [
        (
            "description/materials.py",
            "from inverse.response import light",
            "description.materials imports inverse.response.light",
        ),
        (
            "response/light.py",
            "from ..inference import noise",
            "response.light imports inverse.inference.noise",
        ),
        ("response/__init__.py", "from .. import plot", "response imports inverse.plot"),
        ("response/heat.py", "from inverse import table", "response.heat imports inverse"),
        (
            "elastic/__init__.py",
            "def f():\n    import inverse.description.stack",
            "elastic imports inverse.description.stack",
        ),
        ("inference/a.py", "from inverse.study.batch import run", "inference.a imports inverse.study.batch"),
    ],
)
def test_an_import_against_the_flow_is_found(tmp_path: Path, name: str, source: str, found: str) -> None:
    others = ("response/light.py", "inference/noise.py", "plot.py", "description/stack.py", "study/batch.py")
    assert list(wrong_way(write_tree(tmp_path, dict.fromkeys(others, "") | {name: source}))) == [
        f"inverse.{found}"
    ]


def test_imports_with_the_flow_are_left_alone(tmp_path: Path) -> None:
    sources = {
        "description/quantities.py": "import numpy",
        "inference/a.py": "from ..response.light import f\nfrom . import b\n"
        "from ..description.quantities import check",
        "inference/b.py": "",
        "response/light.py": "def f(): ...",
        "__main__.py": "import inverse as inv\nfrom . import report",
        "report.py": "",
    }
    assert list(wrong_way(write_tree(tmp_path, sources))) == []


def test_a_module_without_a_room_is_refused(tmp_path: Path) -> None:
    with pytest.raises(LookupError, match=r"inverse\.utils stands in no room"):
        list(wrong_way(write_tree(tmp_path, {"utils.py": ""})))


def test_a_heavy_import_is_found_unless_it_waits(tmp_path: Path) -> None:
    waiting = "if TYPE_CHECKING:\n    import xarray\ndef f():\n    import corner\n"
    sources = {"description/stack.py": "from scipy import stats\nimport scipy.optimize", "plot.py": waiting}
    assert list(heavy_at_import(write_tree(tmp_path, sources))) == [
        "inverse.description.stack imports scipy.stats"
    ]


def test_import_loads_nothing_heavy() -> None:
    code = f"import sys, inverse; print(inverse.__file__); print([m for m in {HEAVY} if m in sys.modules])"
    assert run_python(code).splitlines() == [str(PACKAGE / "__init__.py"), "[]"]


def test_import_takes_under_a_second_of_cpu_time() -> None:
    """Twice what numpy and scipy.optimize cost (0.4 to 0.5 s here); ArviZ or corner alone would break it."""
    seconds = min(float(run_python("import time, inverse; print(time.process_time())")) for _ in range(3))
    assert seconds < 1.0


def test_one_blas_thread() -> None:
    import numpy  # noqa: F401  # loads the library whose threads are counted
    from threadpoolctl import threadpool_info

    assert {pool["num_threads"] for pool in threadpool_info()} == {1}
