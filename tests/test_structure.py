"""What must hold of the source itself: who imports whom, what loads when, sizes and texts."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGES = ("synth", "netlist")
LONGEST_MODULE = 400
LONGEST_FUNCTION = 60

# Top-level names whose import is slow; `synth` leaves them to the functions that need them.
SLOW_FOR_SYNTH = {"netlist", "matplotlib", "sympy", "scipy.signal"}

# Import names that a declared dependency brings along as a part of its own interface.
PART_OF = {"markupsafe": "jinja2", "pydantic_core": "pydantic", "_pytest": "pytest"}

# Folders of people and of build machines, and files addressed as such.
MACHINE_PATH = re.compile(
    r"(?<![\w.~])/(?:home|Users|root|work(?:space)?|builds|mnt|srv|media)/\w"
    r"|file:/{3}|\b[A-Z]:\\Users"
)
ADDRESS = re.compile(r"\w+://|^\s*(?:-i|-f|--index|--extra-index|--find-links|--trusted)", re.M)


def sources(folder: Path) -> list[Path]:
    """The Python files below a folder."""
    return sorted(folder.rglob("*.py"))


def tree_of(path: Path) -> ast.Module:
    """The syntax tree of a file."""
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def imported_modules(tree: ast.AST) -> Iterator[str]:
    """Names of all modules imported anywhere in a tree, functions included."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: imports are absolute here"
            assert node.module
            yield node.module


def texts(project: Path) -> Iterator[Path]:
    """The text files of the project, without what tools and the program make."""
    made = {"packs", "__pycache__", "polewright.egg-info"}
    tops = [p for p in project.iterdir() if p.is_file() and p.name != ".setup.log"]
    folders = [project / name for name in (*PACKAGES, "tests", "scenarios", ".ci")]
    below = [p for folder in folders for p in folder.rglob("*") if p.is_file()]
    for path in sorted(tops + below):
        if not made & set(path.parts) and path.suffix not in {".png", ".pyc"}:
            yield path


def lines_of_code(function: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """Lines from `def` to the end, less those of the docstring."""
    first, last = function.body[0], function.end_lineno
    assert last is not None and first.end_lineno is not None
    documented = ast.get_docstring(function) is not None
    return last - function.lineno + 1 - documented * (first.end_lineno - first.lineno + 1)


def run_python(project: Path, program: str) -> str:
    """Standard output of a program in a fresh interpreter."""
    done = subprocess.run(
        [sys.executable, "-c", program],
        cwd=project,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_no_module_of_synth_loads_the_outer_layer_or_a_slow_library(project):
    """Each is imported in turn in one fresh interpreter; the first that offends is named."""
    names = [
        ".".join(path.relative_to(project).with_suffix("").parts).removesuffix(".__init__")
        for path in sources(project / "synth")
    ]
    assert "synth" in names and len(names) > 10
    program = f"""
import importlib, sys
for name in {sorted(names)!r}:
    importlib.import_module(name)
    for slow in {sorted(SLOW_FOR_SYNTH)!r}:
        if slow in sys.modules:
            sys.exit(f"{{name}} loads {{slow}}")
print("none")
"""
    assert run_python(project, program) == "none"


def test_synth_never_imports_netlist(project):
    """Not even inside a function."""
    for path in sources(project / "synth"):
        outer = [m for m in imported_modules(tree_of(path)) if m.split(".")[0] == "netlist"]
        assert not outer, f"{path} imports {outer}"


@pytest.mark.parametrize(
    ("folders", "extras"), [(PACKAGES, ()), (("tests",), ("dev",))], ids=["program", "tests"]
)
def test_every_import_is_declared(project, folders, extras):
    """A library is the standard one, a dependency in pyproject.toml, or a part of one."""
    table = tomllib.loads((project / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = list(table["dependencies"])
    for extra in extras:
        wanted += table["optional-dependencies"][extra]
    declared = {re.split(r"[^\w-]", w)[0].lower() for w in wanted}
    known = {*sys.stdlib_module_names, *PACKAGES, "tests"}
    for folder in folders:
        for path in sources(project / folder):
            tops = {name.split(".")[0] for name in imported_modules(tree_of(path))} - known
            undeclared = {t for t in tops if PART_OF.get(t, t).lower() not in declared}
            assert not undeclared, f"{path} imports {undeclared}"


def test_every_dependency_is_used(project):
    """What a user must install is imported somewhere in the program."""
    table = tomllib.loads((project / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    declared = {re.split(r"[^\w-]", d)[0].lower() for d in table["dependencies"]}
    imported = {
        name.split(".")[0].lower()
        for folder in PACKAGES
        for path in sources(project / folder)
        for name in imported_modules(tree_of(path))
    }
    assert declared <= imported


def test_every_module_says_what_it_is_for(project):
    """Each file with code in it opens with a docstring."""
    for folder in (*PACKAGES, "tests"):
        for path in sources(project / folder):
            tree = tree_of(path)
            assert not tree.body or ast.get_docstring(tree), f"{path} has no module docstring"


def test_modules_and_functions_stay_short(project):
    """One idea a file, and functions that fit on a screen; docstrings of functions may be long."""
    too_long = []
    for folder in PACKAGES:
        for path in sources(project / folder):
            lines = len(path.read_text(encoding="utf-8").splitlines())
            if lines > LONGEST_MODULE:
                too_long.append(f"{path}: {lines} lines")
            for node in ast.walk(tree_of(path)):
                if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
                    length = lines_of_code(node)
                    if length > LONGEST_FUNCTION:
                        too_long.append(f"{path}:{node.lineno}: {node.name}, {length} lines")
    assert not too_long, "\n".join(too_long)


@pytest.mark.parametrize(
    "text", ["/home/someone/board", "'/Users/x'", "file:" + "///x", "cd /builds/x", "C:\\Users\\x"]
)
def test_a_path_of_one_machine_is_recognised(text):
    """The pattern of the next test finds what it is meant to find."""
    assert MACHINE_PATH.search(text)


@pytest.mark.parametrize("text", ["rad/s", "R/root/x", "https://x/home/y", "~/home/x", "/usr/lib"])
def test_other_slashes_are_not_taken_for_one(text):
    """And nothing else."""
    assert not MACHINE_PATH.search(text)


def test_no_text_names_a_path_of_one_machine(project):
    """The project is the same wherever it lies."""
    own = Path(__file__).resolve()
    for path in texts(project):
        if path != own:
            found = MACHINE_PATH.search(path.read_text(encoding="utf-8"))
            assert not found, f"{path}: {found.group()}"


def test_the_lock_file_pins_and_hashes_everything_and_names_no_address(project):
    """Where packages come from is the user's business; what they are is ours."""
    text = (project / "requirements.lock").read_text(encoding="utf-8")
    assert not ADDRESS.search(text)
    joined = text.replace("\\\n", " ")
    entries = [line for line in joined.splitlines() if line and not line.lstrip().startswith("#")]
    assert len(entries) > 20
    for entry in entries:
        assert re.match(r"[\w.-]+==\S+", entry), entry
        assert "--hash=sha256:" in entry, entry


def test_the_lock_file_holds_every_declared_package(project):
    """A dependency that was added without a new lock file is found here."""
    table = tomllib.loads((project / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    declared = table["dependencies"] + table["optional-dependencies"]["dev"]
    text = (project / "requirements.lock").read_text(encoding="utf-8")
    locked = {name.lower() for name in re.findall(r"^([\w.-]+)==", text, re.MULTILINE)}
    assert {re.split(r"[^\w-]", d)[0].lower() for d in declared} <= locked


def test_the_shell_scripts_parse_and_say_how_they_are_used(project):
    """`--help` needs no set-up."""
    for script in ("scenarios/setup.sh", "scenarios/run", "tests/run", ".ci/run"):
        shell = "bash" if script == ".ci/run" else "sh"
        subprocess.run([shell, "-n", project / script], check=True, timeout=20)
    for script in ("scenarios/run", "tests/run"):
        shown = subprocess.run(
            ["sh", project / script, "--help"],
            capture_output=True,
            text=True,
            check=True,
            timeout=20,
        )
        assert f"sh {script}" in shown.stdout
        assert not shown.stderr


def test_the_map_for_developers_names_every_module_and_no_other(project):
    """A module is named in DEVELOPERS.md or in the docstring of its package."""
    guide = (project / "DEVELOPERS.md").read_text(encoding="utf-8")
    quoted = " ".join(re.findall(r"`([^`\n]+)`", guide))
    named = set(re.findall(r"[a-z_0-9]+", quoted))
    modules = [p for folder in PACKAGES for p in sources(project / folder) if p.stem[0] != "_"]
    lost = []
    for path in modules:
        around = ast.get_docstring(tree_of(path.parent / "__init__.py")) or ""
        if path.stem not in named | set(re.findall(r"[a-z_0-9]+", around)):
            lost.append(str(path.relative_to(project)))
    assert not lost, f"not on the map: {lost}"
    everything = {p.name for p in texts(project)}
    for name in re.findall(r"`(?:[\w./]*/)?(\w+\.py)`", guide):
        assert name in everything or name == "NAME.py", f"on the map but not there: {name}"
    for name in re.findall(r"`((?:[\w.]+/)+)`", guide):
        bases = (project, *(project / folder for folder in (*PACKAGES, "tests")))
        assert any((base / name).is_dir() for base in bases), f"on the map but not there: {name}"
