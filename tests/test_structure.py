"""The house holds: who imports whom, what loads at the start, names that shadow nothing, examples that run."""

from __future__ import annotations

import ast
import doctest
import importlib
import inspect
import json
import os
import pkgutil
import subprocess
import sys
from pathlib import Path

import pytest

import tfstats

PACKAGE = Path(tfstats.__file__).resolve().parent
REPOSITORY = Path(__file__).resolve().parents[1]

# A room imports only from rooms further down.  Rooms that are not built yet have their place already.
LAYERS = (
    "__main__",
    "command_line",
    "analysis",
    "study_size",
    "choices",
    "reporting",
    "baseline_review",
    "plan_file",
    "results",
    "findings",
    "corrections",
    "permutation",
    "contrasts",
    "averaged_maps",
    "normalization",
    "simulated_power",
    "power_files",
    "foundations",
    "kernels",
)

# Libraries that one room alone may import.
ONE_ROOM = {
    "matplotlib": "reporting",
    "jinja2": "reporting",
    "pydantic": "plan_file",
    "h5py": "power_files",
    "h5netcdf": "power_files",
    "xarray": "power_files",
    "scipy.io": "power_files",
    "click": "command_line",
}

HEAVY = (
    "numba", "scipy.stats", "pandas", "matplotlib", "statsmodels", "pydantic", "rich", "jinja2", "h5py", "click", "xarray",
)  # fmt: skip

TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "tfstats", "tests", "worked_examples"}

SOURCES = sorted(PACKAGE.rglob("*.py"))


def room_of(module: str) -> str:
    """`tfstats.results.contrast_testing` -> `results`; the package itself -> ``."""
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else ""


def module_of(path: Path) -> str:
    parts = ("tfstats", *path.relative_to(PACKAGE).with_suffix("").parts)
    return ".".join(part for part in parts if part != "__init__")


def imported(path: Path) -> list[tuple[int, str]]:
    """Every module that a file imports anywhere in it, with its line; `from a import b` gives a.b as well as a."""
    package = module_of(path) if path.name == "__init__.py" else module_of(path).rpartition(".")[0]
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found += [(node.lineno, alias.name) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                above = package.split(".")[: len(package.split(".")) - node.level + 1]
                base = ".".join([*above, *([base] if base else [])])
            found.append((node.lineno, base))
            found += [(node.lineno, f"{base}.{alias.name}") for alias in node.names]
    return found


def rooms() -> set[str]:
    return {room_of(module_of(path)) for path in SOURCES} - {""}


def test_every_room_has_its_place_in_the_table_of_layers() -> None:
    assert rooms() <= set(LAYERS)


def test_no_room_is_empty() -> None:
    for room in rooms():
        if (PACKAGE / room).is_dir():
            assert [path for path in (PACKAGE / room).glob("*.py") if path.name != "__init__.py"], room


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_rooms_import_only_from_rooms_below(path: Path) -> None:
    room = room_of(module_of(path))
    if not room:
        return  # the package's own __init__ names every room, and loads none: see the test of the start
    place = LAYERS.index(room)
    wrong = []
    for line, name in imported(path):
        other = room_of(name) if name.split(".")[0] == "tfstats" else ""
        if other in LAYERS and other != room and LAYERS.index(other) <= place:
            wrong.append(f"line {line}: {room} imports {name}")
    assert not wrong


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_rooms_reach_each_other_by_import_not_through_the_public_names(path: Path) -> None:
    if module_of(path) == "tfstats":
        return
    tree = ast.parse(path.read_text(encoding="utf-8"))
    used = {
        node.attr
        for node in ast.walk(tree)
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "tfstats"
    }
    taken = {name.removeprefix("tfstats.") for _, name in imported(path) if name.startswith("tfstats.")}
    public = set(tfstats._HOMES)
    assert not (used | taken) & public


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_one_room_alone_imports_each_of_these_libraries(path: Path) -> None:
    room = room_of(module_of(path))
    wrong = []
    for line, name in imported(path):
        for library, owner in ONE_ROOM.items():
            if (name == library or name.startswith(library + ".")) and room != owner:
                wrong.append(f"line {line}: {name} belongs to {owner}")
    assert not wrong


@pytest.mark.parametrize("path", [path for path in SOURCES if room_of(module_of(path)) == "kernels"], ids=module_of)
def test_kernels_import_nothing_of_the_domain(path: Path) -> None:
    allowed = {"numba", "numpy", "llvmlite", "tfstats", *sys.stdlib_module_names}
    # Of scipy only coefficients from scipy.special, from which tables are made once.
    names = {name for _, name in imported(path)} - {"scipy", "scipy.special"}
    assert {name.split(".")[0] for name in names} <= allowed


def test_kernels_do_not_speak_of_the_domain() -> None:
    # The axes have to be called something; whose numbers they are, and what they mean, is none of a kernel's business.
    words = {"subject", "subjects", "trial", "trials", "condition", "conditions", "baseline", "decibel", "recalled"}
    spoken = []
    for path in (PACKAGE / "kernels").glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            name = node.id if isinstance(node, ast.Name) else node.arg if isinstance(node, ast.arg) else ""
            if name in words:
                spoken.append(f"{path.name}, line {node.lineno}: {name}")
    assert not spoken


def test_no_folder_or_file_shares_its_name_with_a_public_function() -> None:
    """Loading a module sets its name on its package, where it would hide the function of that name."""
    clashes = []
    for room in sorted(rooms()):
        package = importlib.import_module(f"tfstats.{room}")
        if room in tfstats._HOMES:
            clashes.append(f"tfstats.{room}")
        public = set(getattr(package, "__all__", ()))
        clashes += [f"tfstats.{room}.{name}" for name in public if inspect.ismodule(getattr(package, name))]
        if hasattr(package, "__path__"):
            inside = {module.name for module in pkgutil.iter_modules(package.__path__)}
            clashes += [f"tfstats.{room}.{name}" for name in inside & (set(tfstats._HOMES) | public)]
    assert not clashes


def loaded_after(statements: str) -> set[str]:
    code = f"{statements}\nimport json, sys\nprint(json.dumps(sorted(sys.modules)))"
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(PACKAGE.parent), os.environ.get("PYTHONPATH", "")])}
    # Coverage or a test plugin in the parent's environment would load modules of its own.
    environment.pop("COVERAGE_PROCESS_START", None)
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, encoding="utf-8", env=environment, check=True
    )
    return set(json.loads(done.stdout.splitlines()[-1]))


def test_import_loads_nothing_heavy() -> None:
    loaded = loaded_after("import tfstats")
    assert "tfstats" in loaded
    assert not loaded & set(HEAVY)


def test_the_foundations_load_nothing_heavy() -> None:
    names = [module.name for module in pkgutil.iter_modules([str(PACKAGE / "foundations")])]
    loaded = loaded_after("\n".join(f"import tfstats.foundations.{name}" for name in names))
    assert "tfstats.foundations.errors" in loaded
    assert not loaded & set(HEAVY)


@pytest.mark.parametrize("name", sorted(tfstats._HOMES))
def test_public_names_resolve_and_are_documented_with_an_example(name: str) -> None:
    thing = getattr(tfstats, name)
    assert thing.__name__ == name
    text = inspect.getdoc(thing) or ""
    assert text, f"{name} has no docstring"
    assert doctest.DocTestParser().get_examples(text), f"{name} has no example in its docstring"


def test_dir_lists_every_public_name() -> None:
    assert set(tfstats._HOMES) <= set(dir(tfstats))
    assert set(tfstats.__all__) == {"__version__", *tfstats._HOMES}


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="module 'tfstats' has no attribute 'nothing_of_this_name'"):
        tfstats.nothing_of_this_name  # noqa: B018


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_examples_in_docstrings_run(path: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    if path.name == "__main__.py":
        return  # importing it would start the program
    monkeypatch.chdir(tmp_path)
    module = importlib.import_module(module_of(path))
    outcome = doctest.testmod(module, optionflags=doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS)
    assert outcome.failed == 0


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_every_module_says_what_it_is_for(path: Path) -> None:
    assert ast.get_docstring(ast.parse(path.read_text(encoding="utf-8")))


def calls_without_encoding(path: Path) -> list[str]:
    """Text files opened by the locale's encoding."""
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if not isinstance(node, ast.Call):
            continue
        called = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
        named = {keyword.arg for keyword in node.keywords}
        texts = [argument.value for argument in node.args if isinstance(argument, ast.Constant)]
        texts += [keyword.value.value for keyword in node.keywords if isinstance(keyword.value, ast.Constant)]
        binary = any(isinstance(text, str) and "b" in text and set(text) <= set("rwxab+") for text in texts)
        builtin = isinstance(node.func, ast.Name) and called == "open"
        if (builtin or called in ("read_text", "write_text")) and "encoding" not in named and not binary:
            found.append(f"{path.name}, line {node.lineno}")
    return found


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: module_of(path))
def test_text_files_are_utf8_by_name(path: Path) -> None:
    assert not calls_without_encoding(path)


def tracked_files() -> list[str]:
    try:
        done = subprocess.run(
            ["git", "-C", str(REPOSITORY), "ls-files"], capture_output=True, text=True, encoding="utf-8", check=True
        )
    except (OSError, subprocess.CalledProcessError):
        pytest.skip("not a git checkout, or no git: what belongs to the repository is not known")
    if not done.stdout.strip():
        pytest.skip("git lists no files here: what belongs to the repository is not known")
    return done.stdout.splitlines()


def test_the_top_of_the_repository_holds_nothing_else() -> None:
    top = {name.split("/")[0] for name in tracked_files()}
    assert {name for name in top if not name.startswith(".")} == TOP_LEVEL


def test_nothing_compiled_or_large_is_kept() -> None:
    for name in tracked_files():
        path = REPOSITORY / name
        assert path.suffix not in {".pyc", ".nbi", ".nbc", ".so", ".npz", ".h5", ".mat"}, name
        if path.is_file():
            assert path.stat().st_size < 500_000, name


def test_plain_versions_share_nothing_with_the_package() -> None:
    for path in sorted((REPOSITORY / "tests" / "plain_versions").glob("*.py")):
        wrong = [
            node.lineno
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
            if (isinstance(node, ast.Import) and any(alias.name.split(".")[0] == "tfstats" for alias in node.names))
            or (isinstance(node, ast.ImportFrom) and (node.module or "").split(".")[0] == "tfstats")
        ]
        assert not wrong, path.name
