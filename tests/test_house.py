"""The rules of the house that a test can read: layers, names, stubs, examples, and what no file may hold."""

import ast
import doctest
import importlib.metadata
import inspect
import re
import subprocess
import sys
import types
from pathlib import Path

import numpy as np
import pytest

import limen as lm
from limen import _core

ROOT = Path(__file__).resolve().parent.parent


def tracked():
    """Files of the project as git sees them, those not yet added included; all that is not ignored without git."""
    asked = subprocess.run(["git", "-C", ROOT, "ls-files", "-co", "--exclude-standard"], capture_output=True, text=True)
    if asked.returncode != 0:
        pytest.skip("not a git checkout")
    return [ROOT / name for name in asked.stdout.splitlines() if (ROOT / name).is_file()]


def texts(*suffixes):
    """(path relative to the project, content) of the project's own text files, the licence aside."""
    for path in tracked():
        if path.suffix in {".npz", ".png"} or path.name == "LICENSE" or (suffixes and path.suffix not in suffixes):
            continue
        yield path.relative_to(ROOT).as_posix(), path.read_text(encoding="utf-8")


C_FILES = sorted(path.relative_to(ROOT / "csrc").as_posix() for path in (ROOT / "csrc").glob("*/*.[ch]"))
CORE_FILES = [name for name in C_FILES if not name.startswith("binding/")]

# --- layers -------------------------------------------------------------------------------------------------------
# An arrow for each folder: what it may include beside itself and limen.h. The public header is the way across.
MAY_INCLUDE = {
    "numeric": set(),
    "density": {"numeric"},
    "decide": {"numeric", "density"},
    "evidence": {"numeric", "density"},
    "slice": {"numeric"},
    "binding": {"numeric", "density", "decide", "evidence", "slice"},
}


@pytest.mark.parametrize("name", C_FILES)
def test_includes_point_one_way(name):
    folder = name.split("/")[0]
    text = (ROOT / "csrc" / name).read_text(encoding="utf-8")
    for included in re.findall(r'#\s*include\s*"([^"]+)"', text):
        beside, inside = (ROOT / "csrc" / folder / included).resolve(), (ROOT / "csrc" / included).resolve()
        target = (beside if beside.exists() else inside).relative_to(ROOT / "csrc").as_posix()
        ok = target == "limen.h" or target.split("/")[0] in MAY_INCLUDE[folder] | {folder}
        assert ok, f"csrc/{name} includes {target}; {folder}/ may include limen.h and {sorted(MAY_INCLUDE[folder])}"
    if folder != "binding":
        foreign = re.findall(r"#\s*include\s*[<\"]((?:Python|numpy/)[^>\"]*)", text)
        assert not foreign, f"csrc/{name} includes {foreign}; only csrc/binding/ knows of Python"


@pytest.mark.parametrize("name", CORE_FILES)
def test_the_core_neither_prints_nor_ends_the_process_nor_goes_round_the_memory_seam(name):
    text = (ROOT / "csrc" / name).read_text("utf-8")
    code = re.sub(r"/\*.*?\*/|//[^\n]*|\"(?:\\.|[^\"\\])*\"", " ", text, flags=re.S)
    assert not re.findall(r"\b(?:printf|puts|fprintf|perror|abort|exit|assert)\s*\(", code)
    if name != "numeric/memory.c":
        found = re.findall(r"\b(?:malloc|calloc|realloc|free|strdup)\s*\(", code)
        assert not found, f"csrc/{name} calls {found}; memory comes through numeric/memory.h"


def test_the_core_has_no_mutable_globals():
    objects = [path for folder in MAY_INCLUDE for path in (ROOT / "csrc/build" / folder).glob("*.o")]
    if not objects:
        pytest.skip("csrc/build is empty: `make -C csrc` first")
    # Kernels are chosen once into a pointer that never changes again; it is the one exception.
    table = subprocess.run(["objdump", "-t", *objects], capture_output=True, text=True, check=True).stdout
    writable = re.findall(r"\sO \.(?:data|bss)\s+[0-9a-f]+\s+(?:\.hidden )?(\S+)", table)
    assert [name for name in writable if not re.fullmatch(r"lm_kernels?_chosen(\.\d+)?|chosen(\.\d+)?", name)] == []


def test_the_module_exports_its_init_function_and_nothing_else():
    if not sys.platform.startswith("linux"):
        pytest.skip("reads ELF symbols")
    listed = subprocess.run(["nm", "-D", "--defined-only", _core.__file__], capture_output=True, text=True, check=True)
    names = {line.split()[-1] for line in listed.stdout.splitlines()}
    sanitizers = {name for name in names if re.match(r"_*(asan|ubsan|gcov|llvm|odr)", name)}
    assert names - sanitizers - {"_init", "_fini", "__bss_start", "_edata", "_end"} == {"PyInit__core"}


# --- files --------------------------------------------------------------------------------------------------------
def test_top_level_is_fixed():
    allowed = set("README.md DEVELOPERS.md LICENSE setup.py pyproject.toml csrc pkg tests notebooks".split())
    there = {path.relative_to(ROOT).parts[0] for path in tracked()}
    assert {name for name in there if not name.startswith(".")} - allowed == set()


def test_one_version():
    header = re.search(r'#define LM_VERSION "([^"]+)"', (ROOT / "csrc/limen.h").read_text("utf-8")).group(1)
    assert header == _core.__version__ == lm.__version__ == importlib.metadata.version("limen")
    elsewhere = [name for name, text in texts(".c", ".h", ".py", ".pyi", ".toml") if f'"{header}"' in text]
    assert elsewhere == ["csrc/limen.h"], "the version is written once, in csrc/limen.h"


def test_lines_are_short_and_clean():
    bad = []
    for name, text in texts(".c", ".h", ".py", ".pyi", ".md", ".toml", ""):
        for number, line in enumerate(text.splitlines(), 1):
            too_long = len(line) > 120 and not line.startswith("|")     # a row of a table cannot be broken
            if too_long or line != line.rstrip() or ("\t" in line and not name.endswith("Makefile")):
                bad.append(f"{name}:{number}: {len(line)} columns, or a tab, or a blank at the end")
        if text and not text.endswith("\n"):
            bad.append(f"{name}: no newline at the end")
    assert not bad, "\n".join(bad)


def test_files_open_with_what_they_are_about():
    bad = [f"csrc/{name}" for name in C_FILES if not (ROOT / "csrc" / name).read_text("utf-8").startswith("/*")]
    bad += [name for name, text in texts(".py") if not text.lstrip("#! /usrbinenvpytho3\n").startswith(('"""', "%%"))]
    assert not bad, "\n".join(bad)


def test_files_speak_of_the_project_alone():
    """No path or host of one machine, no tracker, nothing left to do."""
    patterns = {
        "a machine's path": r"/(?:home|root|work|opt|tmp)/",
        "a registry's host": r"https?://(?:deb|registry|files|pypi)\b|index.url",
        "a tracker": r"(?i)\b(?:issues? ?#?\d+|pull request|merge request)\b",
        "something undone": r"\b(?:TODO|FIXME|XXX|HACK)\b",
    }
    found = [
        f"{name}: {what}: {match.group(0)!r}"
        for name, text in texts()
        if name != "tests/test_house.py"
        for what, pattern in patterns.items()
        for match in re.finditer(pattern, text)
    ]
    assert not found, "\n".join(found)


def test_import_is_light():
    """Plots, progress and foreign arrays are met when they come; `import limen` costs NumPy alone."""
    code = "import sys, limen; print(*sorted({name.split('.')[0] for name in sys.modules}))"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    heavy = set("matplotlib scipy pandas xarray dask tqdm IPython ipywidgets sklearn".split())
    assert set(run.stdout.split()) & heavy == set()


# --- names --------------------------------------------------------------------------------------------------------
def test_all_is_sorted_and_complete():
    assert lm.__all__ == sorted(lm.__all__), "limen.__all__ is kept sorted"
    missing = [name for name in lm.__all__ if not hasattr(lm, name)]
    assert missing == [], "limen.__all__ names what limen has not"
    public = {name for name, v in vars(lm).items() if name[0] != "_" and not isinstance(v, types.ModuleType)}
    assert public - set(lm.__all__) == set(), "public in limen, and not in limen.__all__"


def is_special(name):
    return name.startswith("__") and name.endswith("__") and name != "__version__"


def stub_names(body):
    """{name: node} of the names that a stub's body declares; overloads fall together."""
    names = {}
    for node in body:
        if isinstance(node, (ast.FunctionDef, ast.ClassDef)):
            names[node.name] = node
        elif isinstance(node, ast.AnnAssign):
            names[node.target.id] = node
    return names


STUB = stub_names(ast.parse((ROOT / "pkg/limen/_core.pyi").read_text("utf-8")).body)


def test_stub_names_what_the_module_has_and_nothing_else():
    has = {name for name in vars(_core) if not is_special(name)}
    helpers = {name for name, node in STUB.items() if name.startswith("_") and not isinstance(node, ast.FunctionDef)}
    assert has - set(STUB) == set(), "in limen._core, and not in _core.pyi"
    assert set(STUB) - helpers - has == set(), "in _core.pyi, and not in limen._core"
    for name, node in STUB.items():
        kind = getattr(_core, name, None)
        if isinstance(node, ast.ClassDef) and isinstance(kind, type):
            declared = {n for n in stub_names(node.body) if not is_special(n)}
            members = {n for n in vars(kind) if not is_special(n)}
            assert declared == members, f"members of {name} in _core.pyi (left) and in limen._core (right)"


@pytest.mark.parametrize("name", [n for n, node in STUB.items() if isinstance(node, ast.FunctionDef)])
def test_stub_signature_is_the_function_s(name):
    arguments = STUB[name].args
    declared = [a.arg for a in arguments.posonlyargs + arguments.args]
    declared += ["*" + arguments.vararg.arg] if arguments.vararg else []
    declared += [a.arg for a in arguments.kwonlyargs]
    function = getattr(_core, name)
    assert getattr(function, "__text_signature__", None), f"the docstring of {name} must open with its signature"
    stars = {inspect.Parameter.VAR_POSITIONAL: "*"}
    assert [stars.get(p.kind, "") + p.name for p in inspect.signature(function).parameters.values()] == declared


def test_documents_name_only_what_exists():
    unknown = set()
    for name in ("README.md", "DEVELOPERS.md", "notebooks/captures/README.md"):
        path = ROOT / name
        for chain in re.findall(r"\blm((?:\.[a-z]\w*)+)", path.read_text("utf-8") if path.exists() else ""):
            value = lm
            for part in chain.split(".")[1:]:
                if not hasattr(value, part):
                    unknown.add(f"{name}: lm{chain}")
                    break
                value = getattr(value, part)
    assert unknown == set()


# --- examples -----------------------------------------------------------------------------------------------------
def public_objects():
    """(dotted name, object, must it carry an example) of all that `__all__`, its modules and its classes hold."""
    for name in lm.__all__:
        value = getattr(lm, name, None)
        if isinstance(value, types.ModuleType):
            for inner in getattr(value, "__all__", []):
                yield f"{name}.{inner}", getattr(value, inner), True
        elif callable(value):
            yield name, value, True
            if isinstance(value, type):
                for inner, member in vars(value).items():
                    if not inner.startswith("_"):
                        yield f"{name}.{inner}", member, False


OBJECTS = list(public_objects())


@pytest.mark.parametrize(("name", "value", "example"), OBJECTS, ids=[row[0] for row in OBJECTS])
def test_docstring_and_its_example(name, value, example, tmp_path, monkeypatch):
    text = inspect.getdoc(value)
    assert text, f"{name} is public and has no docstring"
    examples = doctest.DocTestParser().get_doctest(text, {"lm": lm, "np": np}, name, None, None)
    if example:
        assert examples.examples, f"the docstring of {name} has no example"
    if "plot" in name or name == "report":
        pytest.importorskip("matplotlib").use("Agg")
    monkeypatch.chdir(tmp_path)
    runner = doctest.DocTestRunner(optionflags=doctest.ELLIPSIS | doctest.NORMALIZE_WHITESPACE)
    said = []
    runner.run(examples, out=said.append)
    if "matplotlib.pyplot" in sys.modules:
        sys.modules["matplotlib.pyplot"].close("all")
    assert runner.failures == 0, "".join(said)


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md"])
def test_python_blocks_of_the_documents_run(name, tmp_path, monkeypatch):
    blocks = re.findall(r"^```python\n(.*?)^```", (ROOT / name).read_text("utf-8"), flags=re.S | re.M)
    monkeypatch.chdir(tmp_path)
    if any("plot" in block or "report" in block for block in blocks):
        pytest.importorskip("matplotlib").use("Agg")
    scope = {}
    for block in blocks:
        exec(compile(block, name, "exec"), scope)
