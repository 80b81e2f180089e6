"""The rules of the house: who may import whom, no circles, no file past 400 lines, no caught Exception."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent / "sercheck"
LONGEST = 400

FOUNDATION = {"errors"}
NUMBERS = {"errors", "serial"}
DATA = NUMBERS | {"grid", "baseline"}
MEASURING = DATA | {"measure", "reference", "recent", "looks"}
RULES = {"errors", "measure", "measures", "rulebook"}
WRITING = {"errors", "record", "formats", "outputs"}

ALLOWED: dict[str, set[str]] = {
    "errors": set(),
    "serial": {"serial"},
    "limits": {"errors"},
    "grid": {"serial"},
    "baseline": {"serial", "grid"},
    "measure": {"serial", "grid"},
    "reference": {"serial", "measure"},
    "measures": MEASURING | {"measures"},
    "rulebook": RULES | {"record"},
    "transforms": DATA | {"rulebook"},
    "intake": NUMBERS | {"grid", "intake", "limits", "rulebook", "outputs"},
    "record": WRITING,
    "formats": WRITING,
    "outputs": WRITING,
    "episodes": {"errors", "record"},
    "sketches": set(),
    "plain": set(),
    "page": set(),
    "brief": WRITING | {"store", "sketches", "plain", "page", "causes"},
    "store": WRITING | {"store", "episodes"},
    "guess_clock": {"errors", "serial", "intake"},
    "guess": {"errors", "serial", "intake", "guess_clock"},
    "portrait": NUMBERS | {"grid", "intake", "facts", "guess", "guess_clock", "page", "plain"},
    "drafting": NUMBERS | {"grid", "intake", "portrait", "guess_clock", "recent", "rehearsal", "rulebook", "plain"},
}
"""Rooms and what of ours they may import; a room that is not named here may import anything but ``cli``."""

OUTSIDE: dict[str, set[str]] = {
    "serial": {"numpy", "scipy.special", "scipy.fft"},
    "grid": {"numpy"},
    "measure": {"numpy", "pydantic"},
    "measures": {"numpy", "pydantic", "scipy.special"},
    "reference": {"numpy"},
    "baseline": {"numpy"},
    "errors": set(),
}
"""Libraries that a room may import, anywhere in its files."""

LATE = {
    "pandas", "pyarrow", "sqlalchemy", "statsmodels", "matplotlib", "scipy.stats", "scipy.signal", "scipy.fft",
    "jinja2", "dask",
    "distributed",
    "apprise",
    "fsspec",
}  # fmt: skip
"""Libraries that are slow to start, imported inside the functions that use them."""


@dataclass(frozen=True)
class Import:
    """One import: the file's module, what it imports, and whether it happens when the file is loaded."""

    module: str
    target: str
    line: int
    early: bool


def module_of(path: Path) -> str:
    """The dotted name of a file."""
    parts = path.relative_to(ROOT.parent).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


FILES = {module_of(path): path for path in sorted(ROOT.rglob("*.py"))}
TREES = {module: ast.parse(path.read_text(), str(path)) for module, path in FILES.items()}


def for_types_only(node: ast.stmt) -> bool:
    """Under ``if TYPE_CHECKING`` nothing is imported when the program runs."""
    return isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)


def imports_in(module: str, nodes: list[ast.stmt], *, early: bool = True) -> Iterator[Import]:
    """All imports of a file that happen when it runs."""
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (Import(module, name.name, node.lineno, early) for name in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{module}:{node.lineno}: a relative import"
            for name in node.names:
                inner = f"{node.module}.{name.name}"
                known = inner in FILES or inner in ("scipy.special", "scipy.stats", "scipy.signal")
                yield Import(module, inner if known else str(node.module), node.lineno, early)
        elif not for_types_only(node):
            inside = early and not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef)
            children = [child for child in ast.walk(node) if child is not node] if not inside else []
            deeper = [child for child in children if isinstance(child, ast.Import | ast.ImportFrom)]
            yield from imports_in(module, deeper, early=False)
            if inside:
                for field in ("body", "orelse", "finalbody", "handlers"):
                    yield from imports_in(module, getattr(node, field, []), early=early)


IMPORTS = [found for module, tree in TREES.items() for found in imports_in(module, tree.body)]


def room(module: str) -> str:
    """The file or folder directly under sercheck that a module lives in."""
    return module.split(".")[1] if "." in module else ""


def ours(target: str) -> bool:
    """One of our own modules."""
    return target.partition(".")[0] == "sercheck"


def test_every_room_imports_only_what_it_may():
    """The direction of the arrows between our own files."""
    wrong = [
        f"{found.module}:{found.line} imports {found.target}"
        for found in IMPORTS
        if ours(found.target)
        and room(found.module) in ALLOWED
        and room(found.target) not in ALLOWED[room(found.module)] | {room(found.module)}
    ]
    assert wrong == []


def test_only_the_command_line_knows_the_command_line():
    """Nothing under it imports it."""
    wrong = [
        f for f in IMPORTS if room(f.target) == "cli" and ours(f.target) and room(f.module) not in ("cli", "__main__")
    ]
    assert wrong == []


def test_the_rulebooks_files_do_not_reach_into_the_measures():
    """Measures are asked for by name: only the finder itself is imported, never one measure's file."""
    wrong = [
        f"{found.module}:{found.line} imports {found.target}"
        for found in IMPORTS
        if found.target.startswith("sercheck.measures.") and room(found.module) != "measures"
    ]
    assert wrong == []


def test_the_inner_rooms_know_only_their_libraries():
    """The numerics know numpy and scipy.special, the measures no files and no tables."""
    wrong = []
    for found in IMPORTS:
        allowed = OUTSIDE.get(room(found.module))
        top = found.target.split(".")[0]
        if allowed is None or ours(found.target) or top in sys.stdlib_module_names:
            continue
        if not any(found.target == name or found.target.startswith(f"{name}.") for name in allowed):
            wrong.append(f"{found.module}:{found.line} imports {found.target}")
    assert wrong == []


def test_slow_libraries_are_imported_where_they_are_used():
    """No file imports a slow library when it is loaded."""
    wrong = [
        f"{found.module}:{found.line} imports {found.target}"
        for found in IMPORTS
        if found.early and any(found.target == name or found.target.startswith(f"{name}.") for name in LATE)
    ]
    assert wrong == []


def test_no_circles():
    """Following imports, late ones included, never leads back."""
    edges: dict[str, set[str]] = {module: set() for module in FILES}
    for found in IMPORTS:
        if found.target in FILES and found.target != found.module:
            edges[found.module].add(found.target)
    while True:
        ends = {module for module, targets in edges.items() if not targets & edges.keys()}
        if not ends:
            break
        edges = {module: targets for module, targets in edges.items() if module not in ends}
    assert {module: sorted(targets & edges.keys()) for module, targets in edges.items()} == {}


@pytest.mark.parametrize("module", FILES)
def test_a_file_has_one_subject(module):
    """At most 400 lines, and the first one says what it is for."""
    text = FILES[module].read_text()
    assert len(text.splitlines()) <= LONGEST
    assert ast.get_docstring(TREES[module]) or not text.strip()


NEVER = {"eval", "exec", "compile", "__import__", "input", "breakpoint"}
"""Built-in functions that run what they are given."""
FORBIDDEN = {"pickle", "marshal", "shelve", "dill", "joblib", "cloudpickle", "code", "pty", "ctypes"}
"""Libraries that run what they read."""
STARTS_PROCESSES = {"sercheck.desks"}
"""Files that may start another process, never through a shell."""


def test_nothing_that_was_read_is_run():
    """No eval, no pickle, no shell, no YAML that builds objects, no template from outside, anywhere in the program."""
    wrong = []
    for module, tree in TREES.items():
        for node in ast.walk(tree):
            if not isinstance(node, ast.Call):
                continue
            name = ast.unparse(node.func)
            words = {keyword.arg: ast.unparse(keyword.value) for keyword in node.keywords}
            bad = name in NEVER or name in {"os.system", "os.popen", "yaml.load", "yaml.unsafe_load", "pd.read_pickle"}
            bad |= words.get("shell", "False") != "False" or words.get("allow_pickle", "False") != "False"
            bad |= name.startswith(("os.exec", "os.spawn")) or name == "os.fork"
            bad |= name.startswith("subprocess.") and module not in STARTS_PROCESSES
            if bad:
                wrong.append(f"{module}:{node.lineno} calls {name}")
    wrong += [f"{f.module}:{f.line} imports {f.target}" for f in IMPORTS if f.target.split(".")[0] in FORBIDDEN]
    assert wrong == []


def test_the_scan_finds_what_it_looks_for(monkeypatch):
    """A file that does any of it is told."""
    started = "import subprocess; subprocess.run('ls', shell=True)"
    for line in ("eval('1')", "import pickle", started, "os.system('ls')", "yaml.load(text)"):
        tree = ast.parse(line)
        monkeypatch.setitem(TREES, "sercheck.bad", tree)
        monkeypatch.setitem(globals(), "IMPORTS", list(imports_in("sercheck.bad", tree.body)))
        with pytest.raises(AssertionError):
            test_nothing_that_was_read_is_run()


def catches_all(handler: ast.ExceptHandler) -> bool:
    """The handler catches Exception, BaseException or whatever comes, and does not raise it again."""
    last = handler.body[-1]
    if isinstance(last, ast.Raise) and last.exc is None:
        return False
    names = ast.unparse(handler.type).strip("()").split(", ") if handler.type else ["BaseException"]
    return bool({"Exception", "BaseException"} & set(names))


def test_no_exception_is_caught_unseen():
    """Only the program's end may catch what it does not know, to tell a bug from a held batch."""
    caught = [
        module
        for module, tree in TREES.items()
        for node in ast.walk(tree)
        if isinstance(node, ast.ExceptHandler) and catches_all(node)
    ]
    assert set(caught) <= {"sercheck.cli"}
    assert len(caught) <= 1


def test_listing_the_commands_starts_nothing_slow():
    """The help text imports no library that is slow to start."""
    script = "import sys; from sercheck.cli import group; group(['--help'], standalone_mode=False); print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert not LATE & set(done.stdout.split())
