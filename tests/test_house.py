"""The rules of the house that matter, held by reading the source: rooms, layers, doors, sizes, names, words.

To add a module, give it a line in ``LAYERS``; to use a new library, give it its one door in ``DOORS``. Nothing here
skips: where a file is missing, the test that needs it fails.
"""

from __future__ import annotations

import ast
import graphlib
import re
import subprocess
import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fnmatch import fnmatchcase
from importlib.util import resolve_name
from pathlib import Path

import pytest

from shardfold import cli, job
from shardfold.errors import JobInvalid

ROOT = Path(__file__).resolve().parents[1]

# A module imports from its own layer and from those above it here, never from those below. Patterns; the first counts.
LAYERS = (
    "errors ids events",
    "job job_* yaml_* quantities layout store store_* local_s3 blas allocator",
    "readers readers.* inventory channels artifacts tables design",
    "summaries",
    "dossier plan budget ledger refusals decisions",
    "block_cuts gather project leaf_terms tasks executor",
    "executor_ray site ingest sums",
    "assess background_columns",
    "advice",
    "publish",
    "finish",
    "conclude",
    "run forecast",
    "results history",
    "verify",
    "screens",
    "tarnmoor demo progress cli __init__ __main__",
)

# Who may import a foreign library. NumPy and SciPy are open to all.
DOORS = {
    "ray": ("executor_ray",),
    "s3fs": ("store*",), "fsspec": ("store*",), "botocore": ("store*", "local_s3"),
    "aiohttp": ("store*",),
    "yaml": ("job*", "yaml*"), "pydantic": ("job*", "yaml*"),
    "pyarrow": ("readers*", "artifacts", "channels", "results", "tarnmoor", "tables"),
    "click": ("cli",), "rich": ("screens", "progress"),
    "xxhash": ("artifacts", "gather"),
    "threadpoolctl": ("blas",),
}  # fmt: skip
OPEN = {"numpy", "scipy", "shardfold"}

# The pure part of the standard library: no clock, path, thread, log or network in kernels.
KERNEL_STDLIB = {
    "__future__", "abc", "collections", "dataclasses", "enum", "fractions", "functools", "hashlib", "itertools", "math",
    "operator", "struct", "types", "typing",
}  # fmt: skip

# Imports inside functions, only to choose an adapter or to defer the reading API: (importing, imported module).
LATE_IMPORTS = {
    ("cli", "executor_ray"), ("store", "store_s3"), ("store", "store_readonly"), ("__init__", "results"),
}  # fmt: skip

PRINTERS = ("cli",)
NO_NAMES = {"utils", "util", "common", "helpers", "helper", "core", "base", "misc"}
NEVER_IMPORTED = {"pickle", "cloudpickle", "dill", "marshal", "shelve", "joblib"}
TOP_LEVEL = {
    "pyproject.toml", "README.md", "DEVELOPERS.md", "LICENSE", ".gitignore", ".ci", "pipeline", "kernels", "tests",
    "deploy", "configs",
}  # fmt: skip
DOCUMENTS = ("README.md", "DEVELOPERS.md")
MODULE_LINES, TEST_MODULE_LINES, FUNCTION_LINES, USUAL_FUNCTION_LINES = 400, 600, 60, 35

# Built from halves, so that this file does not hold what it looks for.
WORKPLACE = re.compile(
    "|".join(
        [r"(?<![\w.])/(?:wo" + r"rk|fa" + r"rm)/", "/tmp/de" + "sign", r"\.\./sha" + "red", r"\bcoding ag" + "ent",
         r"\blanguage mo" + "del", r"\bsub-?ag" + "ents?\\b", r"\bAI assis" + "tant", r"\bthis ses" + "sion\\b",
         r"\bthe session'?s? iss" + "ue", r"\bL" + r"LMs?\b", r"\bCla" + r"ude\b", r"\bChat" + r"GPT\b"]
    ),
    re.IGNORECASE,
)  # fmt: skip


@dataclass(frozen=True)
class Module:
    """One source file: its room, its name within the room (``readers.wide``), path, text and tree."""

    room: str
    name: str
    path: Path
    text: str
    tree: ast.Module

    @property
    def dotted(self) -> str:
        """Return the name it is imported by, packages without ``__init__``."""
        parts = ["shardfold", *(["kernels"] if self.room == "kernels" else []), *self.name.split(".")]
        return ".".join(part for part in parts if part != "__init__")

    def __str__(self) -> str:
        return str(self.path.relative_to(ROOT))


@dataclass(frozen=True)
class Import:
    """One imported module (absolute, dotted), where it stands, and whether that is inside a function."""

    target: str
    line: int
    late: bool


def read_room(room: str) -> list[Module]:
    """Read every module of a room; a package is known by its folder's name."""
    modules = []
    for path in sorted((ROOT / room).rglob("*.py")):
        parts = path.relative_to(ROOT / room).with_suffix("").parts
        name = ".".join(parts[:-1] if parts[-1] == "__init__" and len(parts) > 1 else parts)
        text = path.read_text(encoding="utf-8")
        modules.append(Module(room, name, path, text, ast.parse(text, str(path))))
    return modules


KERNELS, PIPELINE, TESTS = read_room("kernels"), read_room("pipeline"), read_room("tests")
PRODUCT = KERNELS + PIPELINE
KNOWN = {module.dotted for module in PRODUCT}


def imports_of(module: Module) -> list[Import]:
    """Return all imports of a module; ``from package import module`` counts as an import of the module."""
    package = module.dotted if module.path.stem == "__init__" else module.dotted.rpartition(".")[0]
    late = {id(node) for function in functions_of(module.tree) for node in ast.walk(function)}
    found = []
    for node in ast.walk(module.tree):
        if isinstance(node, ast.Import):
            targets = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            source = resolve_name("." * node.level + (node.module or ""), package)
            inner = [f"{source}.{alias.name}" for alias in node.names]
            targets = [name if name in KNOWN else source for name in inner]
        else:
            continue
        found += [Import(target, node.lineno, id(node) in late) for target in targets]
    return found


def functions_of(tree: ast.AST) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    """Yield every function and method."""
    return (node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef))


def length_of(function: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """Return the lines of a function without its docstring."""
    whole, first = function, function.body[0]
    spans = [whole, first] if ast.get_docstring(function) is not None else [whole]
    lines = [(node.end_lineno or node.lineno) - node.lineno + 1 for node in spans]
    return lines[0] - sum(lines[1:])


def matches(name: str, patterns: Iterable[str]) -> bool:
    """Return whether a module's name is one of the patterns."""
    return any(fnmatchcase(name, pattern) for pattern in patterns)


def layer_of(name: str) -> int | None:
    """Return the layer of a pipeline module, ``None`` if the table does not know it."""
    return next((layer for layer, names in enumerate(LAYERS) if matches(name, names.split())), None)


def in_pipeline(target: str) -> str | None:
    """Return the name within ``pipeline/`` of an imported module, ``None`` for kernels and foreign ones."""
    if target == "shardfold":
        return "__init__"
    name = target.removeprefix("shardfold.")
    return None if name == target or name.split(".")[0] == "kernels" else name


def project_files() -> list[Path]:
    """Return the files of the project: what git would commit, or without git all but what it would ignore."""
    command = ["git", "-c", "safe.directory=*", "ls-files", "-co", "--exclude-standard", "-z"]
    try:
        names = subprocess.run(command, cwd=ROOT, capture_output=True, check=True, text=True).stdout.split("\0")
    except (OSError, subprocess.CalledProcessError):
        ignored = [line.strip("/") for line in (ROOT / ".gitignore").read_text().split()] + [".git"]
        paths = [path.relative_to(ROOT) for path in ROOT.rglob("*")]
        names = [str(path) for path in paths if not any(matches(part, ignored) for part in path.parts)]
    return [ROOT / name for name in sorted(names) if name and (ROOT / name).is_file()]


def complain(faults: list[str]) -> None:
    """Fail with all faults, one a line."""
    assert not faults, "\n" + "\n".join(faults)


def test_kernels_know_numbers_only():
    """NumPy, SciPy and the pure part of the standard library; never the pipeline."""
    allowed = KERNEL_STDLIB | {"numpy", "scipy"}
    complain([
        f"{module}:{found.line}: kernels must not import {found.target}"
        for module in KERNELS for found in imports_of(module)
        if found.target.split(".")[0] not in allowed and not found.target.startswith("shardfold.kernels")
    ])  # fmt: skip


def test_every_pipeline_module_has_a_layer():
    """A new module says where it stands before it is used."""
    complain([
        f"{module}: give {module.name!r} a place in LAYERS of tests/test_house.py, not above any module it imports: "
        f"{sorted({name for found in imports_of(module) if (name := in_pipeline(found.target))})}"
        for module in PIPELINE if layer_of(module.name) is None
    ])  # fmt: skip


def test_imports_go_one_way():
    """From a layer to itself or to one above it in the table."""
    faults = []
    for module in PIPELINE:
        own = layer_of(module.name)
        for found in imports_of(module):
            name = in_pipeline(found.target)
            layer = None if name is None else layer_of(name)
            if own is not None and layer is not None and layer > own:
                faults.append(f"{module}:{found.line}: layer {own} imports {name} of layer {layer}")
    complain(faults)


def test_no_import_cycle():
    """Late imports count as well."""
    graph = {m.dotted: {f.target for f in imports_of(m) if f.target in KNOWN and f.target != m.dotted} for m in PRODUCT}
    try:
        graphlib.TopologicalSorter(graph).prepare()
    except graphlib.CycleError as error:
        pytest.fail("import cycle: " + " <- ".join(error.args[1]))


def test_one_door_for_each_foreign_library():
    """And no library without a door."""
    faults = []
    for module in PIPELINE:
        for found in imports_of(module):
            library = found.target.split(".")[0]
            if library in OPEN or library in sys.stdlib_module_names:
                continue
            if library not in DOORS:
                faults.append(f"{module}:{found.line}: {library} has no door; name one in DOORS of tests/test_house.py")
            elif not matches(module.name, DOORS[library]):
                faults.append(f"{module}:{found.line}: {library} is imported by {', '.join(DOORS[library])} only")
    complain(faults)


def test_imports_stand_at_the_top():
    """But for the choice of an adapter."""
    complain([
        f"{module}:{found.line}: import of {found.target} inside a function"
        for module in PRODUCT for found in imports_of(module)
        if found.late and (module.name, in_pipeline(found.target)) not in LATE_IMPORTS
    ])  # fmt: skip


def test_tables_hold_nothing_that_is_gone():
    """A line of a table that matches no module any more is a rule that nobody keeps."""
    names = [module.name for module in PIPELINE]
    used = {(module.name, in_pipeline(found.target)) for module in PIPELINE for found in imports_of(module)}
    libraries = {found.target.split(".")[0] for module in PIPELINE for found in imports_of(module)}
    plain = [pattern for pattern in " ".join(LAYERS).split() if "*" not in pattern]
    complain(
        [f"LAYERS: no module {pattern}" for pattern in plain if pattern not in names]
        + [f"LATE_IMPORTS: {pair} does not happen" for pair in sorted(LATE_IMPORTS - used)]
        + [f"DOORS: nobody imports {library}" for library in sorted(DOORS.keys() - libraries)]
    )


def test_names_say_what_is_inside():
    """No attic."""
    complain([f"{module}: a name for anything" for module in PRODUCT + TESTS if module.path.stem in NO_NAMES])


def test_modules_and_functions_have_a_bearable_length():
    """Hard limits for each, and nine functions in ten below the usual length."""
    limits = {"tests": TEST_MODULE_LINES}
    lines = {module: module.text.count("\n") for module in PRODUCT + TESTS}
    faults = [f"{module}: {n} lines" for module, n in lines.items() if n > limits.get(module.room, MODULE_LINES)]
    lengths = []
    for module in PRODUCT:
        for function in functions_of(module.tree):
            lengths.append(length_of(function))
            if lengths[-1] > FUNCTION_LINES:
                faults.append(f"{module}:{function.lineno}: {function.name} has {lengths[-1]} lines")
    usual = sorted(lengths)[len(lengths) * 9 // 10]
    if usual >= USUAL_FUNCTION_LINES:
        faults.append(f"one function in ten has {usual} lines or more")
    complain(faults)


def test_modules_and_public_names_say_what_they_are():
    """A docstring for every module, public class and public function."""
    faults = [f"{module}: no docstring" for module in PRODUCT if not ast.get_docstring(module.tree)]
    for module in PRODUCT:
        for node in module.tree.body:
            public = isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_")
            if public and not ast.get_docstring(node):
                faults.append(f"{module}:{node.lineno}: {node.name} has no docstring")
    complain(faults)


def test_only_the_command_line_prints():
    """Everything else returns values or emits events."""
    complain([
        f"{module}:{node.lineno}: print"
        for module in PRODUCT if module.name not in PRINTERS for node in ast.walk(module.tree)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "print"
    ])  # fmt: skip


def test_nothing_stored_is_ever_executed():
    """No pickle, no unsafe YAML, no objects in arrays."""
    faults = [
        f"{module}:{found.line}: import of {found.target}"
        for module in PRODUCT for found in imports_of(module) if found.target.split(".")[0] in NEVER_IMPORTED
    ]  # fmt: skip
    for module in PRODUCT + TESTS:
        for node in ast.walk(module.tree):
            if isinstance(node, ast.keyword) and node.arg == "allow_pickle":
                safe = isinstance(node.value, ast.Constant) and node.value.value is False
                faults += [] if safe else [f"{module}:{node.value.lineno}: allow_pickle other than False"]
            if re.fullmatch(r"yaml\.(load|load_all|unsafe_\w+|full_\w+)", dotted_name(node)):
                faults.append(f"{module}:{getattr(node, 'lineno', 0)}: {dotted_name(node)}")
    complain(faults)


def test_nobody_sleeps():
    """The store's default argument is the one place that names the clock's sleep; tests pass their own.

    Benchmarks may, to stand for a slow link.
    """
    faults = []
    for module in PRODUCT + [module for module in TESTS if not module.name.startswith("bench")]:
        defaults = {id(d) for f in functions_of(module.tree) for d in f.args.defaults + f.args.kw_defaults if d}
        store = module.room == "pipeline" and matches(module.name, ("store*",))
        for node in ast.walk(module.tree):
            from_time = isinstance(node, ast.ImportFrom) and node.module == "time"
            taken = from_time and any(alias.name == "sleep" for alias in node.names)
            named = dotted_name(node) == "time.sleep" and not (store and id(node) in defaults)
            if taken or named:
                faults.append(f"{module}:{node.lineno}: sleep")
    complain(faults)


def dotted_name(node: ast.AST) -> str:
    """Return ``a.b`` for an attribute of a name, nothing for all else."""
    plain = isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name)
    return f"{node.value.id}.{node.attr}" if plain else ""


def test_files_speak_of_the_project_only():
    """No word about the place or the way it was written."""
    faults = []
    for path in project_files():
        try:
            lines = path.read_text(encoding="utf-8").splitlines()
        except UnicodeDecodeError:
            continue
        where = path.relative_to(ROOT)
        faults += [f"{where}:{n}: {line.strip()[:90]}" for n, line in enumerate(lines, 1) if WORKPLACE.search(line)]
    complain(faults)


def test_top_level_is_as_agreed():
    """Exactly the agreed names: nothing more, nothing missing."""
    assert {path.relative_to(ROOT).parts[0] for path in project_files()} == TOP_LEVEL


def text_of(name: str) -> str:
    """Return the text of a file of the project."""
    return (ROOT / name).read_text(encoding="utf-8")


def fences(document: str, language: str = r"\w*") -> list[str]:
    """Return the fenced blocks of a document."""
    return re.findall(rf"^```{language}\n(.*?)^```", text_of(document), re.MULTILINE | re.DOTALL)


def code_words(document: str) -> list[str]:
    """Return what stands between single backticks."""
    return re.findall(r"(?<!`)`([^`\n]+)`(?!`)", text_of(document))


def test_ci_runs_the_commands_of_the_readme():
    """Both marked blocks are there, once each, and ``.ci/run`` runs both."""
    for name in ("demo", "test"):
        block = rf"^<!-- command: {name} -->\n```\w*\n[^`]+\n```$"
        assert len(re.findall(block, text_of("README.md"), re.MULTILINE)) == 1, block
        assert re.search(rf"^run_readme_command {name}\b", text_of(".ci/run"), re.MULTILINE), name


def test_documented_commands_exist_and_existing_ones_are_documented():
    """Commands and their options, in code of the documents, against the command line itself."""
    known = {name: {o for p in command.params for o in p.opts} for name, command in cli.commands.commands.items()}
    faults, named = [], set()
    for document in DOCUMENTS:
        for code in fences(document) + code_words(document):
            for name, rest in re.findall(r"(?<!import )\bshardfold ([a-z]\w*)([^\n|;&]*)", code):
                named.add(name)
                options = set(re.findall(r"(?<!\S)--[a-z][\w-]*", rest)) - {"--help"}
                faults += [] if name in known else [f"{document}: no command {name}"]
                faults += [f"{document}: {name} has no option {o}" for o in sorted(options - known.get(name, options))]
    complain(faults + [f"not documented: shardfold {name}" for name in sorted(known.keys() - named)])


def test_documented_job_keys_exist_and_existing_ones_are_documented():
    """Jobs in configs/ are sound and show every key, if only in a comment; documents name no unknown key."""
    known = job.known_keys()
    texts = {f"configs/{path.name}": path.read_text(encoding="utf-8") for path in (ROOT / "configs").glob("*.yaml")}
    assert texts, "configs/ holds no job"
    texts.update({f"{d}, YAML {n}": block for d in DOCUMENTS for n, block in enumerate(fences(d, "ya?ml"), 1)})
    faults = []
    for name, text in texts.items():
        try:
            job.parse_job(text, name)
        except JobInvalid as error:
            faults += [fault for fault in error.faults if name.startswith("configs/") or "not a known key" in fault]
    sections = "|".join(sorted({key.split(".")[0] for key in known if "." in key}))
    code = "\n".join(fences("README.md") + code_words("README.md"))
    dotted = set(re.findall(rf"(?<![\w./])(?:{sections})(?:\.[a-z_]+)+", code))
    files = {word for word in dotted if word.endswith((".json", ".py", ".parquet"))}
    faults += [f"no key {word}" for word in sorted(dotted - files - set(known))]
    shown = "\n".join(text for name, text in texts.items() if name.startswith("configs/"))
    leaves = {key.split(".")[-1] for key in known} - {part for key in known for part in key.split(".")[:-1]}
    complain(faults + [f"configs/ show no {leaf}:" for leaf in sorted(leaves) if not re.search(rf"\b{leaf}:", shown)])
