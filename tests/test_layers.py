"""The house rules, read from the sources: who may import whom, where each library lives, names, sizes."""

import ast
import sys
from functools import cache
from importlib.metadata import distributions
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
SOURCES = sorted([*ROOT.glob("stream/**/*.py"), *ROOT.glob("simulator/**/*.py")])
STAGES = {
    "sources",
    "decoding",
    "labels",
    "features",
    "learners",
    "tables",
    "metrics",
    "optimality",
    "batch_fits",
    "snapshots",
    "reports",
    "operating",
    "topics",
}
RAISED = {"runs": 3, "cli": 4}

HOMES = {
    "typer": "stream/cli/",
    "rich": "stream/cli/screen.py",
    "mmh3": "nowhere: the compiled hash is held to it by the tests",
    "numba": ("stream/kernel.py", "stream/learners/eight.py"),
    "llvmlite": ("stream/kernel.py", "stream/learners/eight.py"),
    "kafka": "stream/topics/client.py",
    "msgspec": (
        "stream/decoding/",
        "stream/reject_file.py",
        "stream/runs/outbox.py",
        "stream/runs/sample.py",
        "stream/runs/scoring.py",
    ),
    "lmdb": "stream/labels/store.py",
    "zstandard": ("stream/sources/opening.py", "stream/labels/example_codec.py", "simulator/log_file.py"),
    "safetensors": "stream/features/unicode_",
    "typing_extensions": "stream/",
    "crc32c": ("stream/manifest.py", "stream/journal.py"),
    "prometheus_client": "stream/operating/exposition.py",
    "plotly": "stream/reports/plotting.py",
    "pyarrow": "stream/snapshots/export.py",
    "tomlkit": "stream/runs/tuning/settings_copy.py",
    "sklearn": "stream/batch_fits/",
    "scipy": "stream/batch_fits/",
    "skglm": "stream/batch_fits/",
    "distributed": "stream/runs/tuning/cluster.py",
    "pydantic": "stream/settings/",
    "pydantic_core": "stream/settings/",
}
"""Where each outside library lives; numpy may be anywhere below cli/."""

TAKEN = {"utils", "util", "core", "base", "common", "helpers", "helper", "manager", "misc"}


def imports_of(path):
    """Every dotted name that a file imports, anywhere in it."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative imports hide where a name lives"
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def imports_at_start(path):
    """Modules that importing a file imports at once: those outside functions and TYPE_CHECKING blocks."""
    waiting = list(ast.parse(path.read_text(encoding="utf-8")).body)
    while waiting:
        node = waiting.pop()
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            yield node.module
        elif isinstance(node, ast.Try | ast.ClassDef | ast.With):
            waiting.extend(node.body)
        elif isinstance(node, ast.If) and "TYPE_CHECKING" not in ast.dump(node.test):
            waiting.extend([*node.body, *node.orelse])


def place(path):
    return path.relative_to(ROOT).as_posix()


def part_of(module):
    """`stream.x.y` -> the folder or file x of stream."""
    pieces = module.split(".")
    return pieces[1] if len(pieces) > 1 else ""


def layer_of(part):
    if part in RAISED:
        return RAISED[part]
    return 2 if part in STAGES else 1


def each_stream_import():
    for path in SOURCES:
        for module in imports_of(path):
            if module == "stream" or module.startswith("stream."):
                yield path, module


def module_of(path):
    return place(path).removesuffix(".py").removesuffix("/__init__").replace("/", ".")


def test_imports_point_down_and_never_sideways():
    wrong = []
    for path, module in each_stream_import():
        own, other = part_of(module_of(path)), part_of(module)
        if not own:  # stream/__init__.py is the library's door: it may show what any layer offers but cli/
            if other == "cli":
                wrong.append(f"{place(path)} imports {module}")
            continue
        upward = layer_of(other) > layer_of(own)
        sideways = layer_of(own) == 2 == layer_of(other) and own != other
        if upward or sideways:
            wrong.append(f"{place(path)} imports {module}")
    assert wrong == []


def test_the_simulator_shares_no_code_with_the_learner():
    wrong = [
        f"{place(path)} imports {m}"
        for path, m in each_stream_import()
        if place(path).startswith("simulator/")
    ]
    assert wrong == []


def test_only_the_command_line_starts_the_simulator():
    wrong = [
        f"{place(path)} imports {module}"
        for path in SOURCES
        for module in imports_of(path)
        if module.split(".")[0] == "simulator" and not place(path).startswith(("simulator/", "stream/cli/"))
    ]
    assert wrong == []


def test_each_outside_library_has_one_home():
    wrong = []
    for path in SOURCES:
        for module in imports_of(path):
            home = HOMES.get(module.split(".")[0])
            if home is not None and not place(path).startswith(home):
                wrong.append(f"{place(path)} imports {module}, whose home is {home}")
    assert wrong == []


def test_no_outside_library_comes_in_unlisted():
    known = {*HOMES, "numpy", "stream", "simulator", *sys.stdlib_module_names}
    found = {module.split(".")[0] for path in SOURCES for module in imports_of(path)}
    assert found - known == set()


def test_the_command_line_imports_nothing_heavy_until_a_command_runs():
    allowed = {"typer", "stream", "simulator", *sys.stdlib_module_names}
    light = {"stream.errors"}
    wrong = []
    for path in SOURCES:
        if not place(path).startswith("stream/cli/"):
            continue
        for module in imports_at_start(path):
            heavy_own = module.startswith(("stream.", "simulator")) and not module.startswith("stream.cli")
            if module.split(".")[0] not in allowed or (heavy_own and module not in light):
                wrong.append(f"{place(path)} imports {module} at the top")
    assert wrong == []


def test_kernels_live_where_the_digest_of_their_sources_looks():
    """stream/kernel.py names the cache of kernels by the files that hold some, and by their neighbours."""
    wrong = [
        place(p)
        for p in SOURCES
        if p.parent.name in ("cli", "runs", "settings") and "\n@kernel" in p.read_text()
    ]
    assert wrong == []


@pytest.mark.parametrize("path", SOURCES, ids=place)
def test_a_file_has_a_name_and_size_of_its_own(path):
    name = path.stem
    if name != "__init__":
        assert name not in sys.stdlib_module_names, "named like a module of the standard library"
        assert name not in installed_names(), "named like a dependency"
        assert not TAKEN & set(name.split("_")), "says nothing of what it does"
    assert path.read_text(encoding="utf-8").count("\n") <= 500


@pytest.mark.parametrize("folder", ["stream", "simulator"])
def test_no_folder_is_named_after_a_rank_or_a_library(folder):
    for path in (ROOT / folder).glob("**/"):
        assert path.name not in TAKEN | set(sys.stdlib_module_names)


@cache
def installed_names():
    """Import names of every installed distribution but our own."""
    files = [f for d in distributions() if d.metadata["Name"] != "bedload" for f in d.files or ()]
    return {file.parts[0].removesuffix(".py").lower() for file in files if file.suffix == ".py"}


@pytest.mark.parametrize("path", SOURCES, ids=place)
def test_public_names_are_what_all_says(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    listed = [
        ast.literal_eval(node.value)
        for node in tree.body
        if isinstance(node, ast.Assign) and getattr(node.targets[0], "id", "") == "__all__"
    ]
    defined = {
        node.name
        for node in tree.body
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_")
    }
    if not listed:
        assert defined == set(), "public names need __all__"
        return
    (names,) = listed
    assert len(names) == len(set(names))
    bound = defined | bound_names(tree)
    assert set(names) <= bound, "__all__ names what is not there"


def bound_names(tree):
    names = set()
    typing_only = [
        n
        for b in tree.body
        if isinstance(b, ast.If) and ast.unparse(b.test) == "TYPE_CHECKING"
        for n in b.body
    ]
    for node in tree.body + typing_only:
        if isinstance(node, ast.Assign | ast.AnnAssign):
            targets = node.targets if isinstance(node, ast.Assign) else [node.target]
            names |= {n.id for t in targets for n in ast.walk(t) if isinstance(n, ast.Name)}
        elif isinstance(node, ast.Import | ast.ImportFrom):
            names |= {(alias.asname or alias.name).split(".")[0] for alias in node.names}
    return names


@pytest.mark.parametrize("path", SOURCES, ids=place)
def test_a_module_says_what_comes_in_and_what_goes_out(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    if tree.body:
        assert ast.get_docstring(tree)
