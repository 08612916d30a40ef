"""The rules of the house, read off the source files.

Rules of this file:

- A rule is a function from one parsed file to its complaints, each with file and line.
- Every rule has a planted offence below that it must find: a rule that cannot fire is no rule.
- The table of floors is extended deliberately: a file that is not in it fails.
"""

from __future__ import annotations

import ast
import builtins
import doctest
import importlib
import importlib.metadata
import inspect
import json
import re
import subprocess
import sys
import tomllib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "plant2"

FLOORS: tuple[tuple[int, str], ...] = (
    (0, "errors"),
    (0, "quantity"),
    (0, "solve"),
    (1, "loopfile"),
    (1, "plant"),
    (2, "sampled"),
    (2, "closedloop"),
    (2, "response"),
    (2, "cautions"),
    (3, "equations"),
    (3, "design"),
    (4, "bounds"),
    (4, "words"),
    (4, "simulate"),
    (4, "attack"),
    (5, "emit"),
    (5, "proof"),
    (5, "chain"),
    (5, "logs"),
    (5, "identify"),
    (6, "check"),
    (7, "present"),
    (7, "firmware"),
    (8, "cli"),
    (8, "__main__"),
)
"""Floor and module; imports go down, and on one floor only to rows above."""

OWNERS: dict[str, tuple[str, ...]] = {
    "pint": ("quantity",),
    "scipy.optimize": ("solve",),
    "scipy": (),
    "pydantic": ("loopfile",),
    "tomllib": ("loopfile",),
    "tomlkit": ("loopfile",),
    "control": ("plant",),
    "flint": ("bounds",),
    "pycparser": ("proof",),
    "z3": ("proof",),
    "jinja2": ("emit",),
    "typer": ("cli",),
    "rich": ("cli", "present"),
}
"""Who may import a library that has an owner; the longest name that fits counts."""

FREE = {"numpy"}
"""Libraries that any file may import."""

HEAVY = {"control", "matplotlib", "scipy"}
"""Slow to import: inside the function that needs them, never when a module is loaded."""

SPEAKERS = {"cli", "__main__"}
"""Modules that may print and end the program; their docstrings are help texts for people."""

TEXT_SUFFIXES = {".py", ".md", ".toml", ".j2", ".c", ".h", ".json", ".csv", ".txt", ".html", ""}


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """One Python file, parsed."""

    name: str
    label: str
    tree: ast.Module


Rule = Callable[[Source], Iterator[str]]


def read_source(path: Path) -> Source:
    """Parse a file of the checkout."""
    label = path.relative_to(ROOT).as_posix()
    return Source(name=path.stem, label=label, tree=ast.parse(path.read_text("utf-8"), label))


def at(source: Source, node: ast.AST, text: str) -> str:
    """A complaint with its place."""
    return f"{source.label}:{getattr(node, 'lineno', 1)}: {text}"


def imports_of(tree: ast.Module) -> Iterator[tuple[ast.AST, str]]:
    """Every imported module by its full dotted name; relative imports resolved in plant2."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield node, alias.name
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                base = f"plant2.{base}".rstrip(".")
            # `from scipy import optimize` and `from plant2 import plant` name a module last.
            for alias in node.names:
                yield node, f"{base}.{alias.name}"


def at_load_time(tree: ast.Module) -> Iterator[ast.AST]:
    """Nodes that run when the module is loaded; blocks for type checkers only are left out."""
    waiting: list[ast.AST] = list(tree.body)
    while waiting:
        node = waiting.pop()
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            continue
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test):
            waiting.extend(node.orelse)
            continue
        yield node
        waiting.extend(ast.iter_child_nodes(node))


# ------------------------------------------------------------------------------------- the rules


def floors(source: Source) -> Iterator[str]:
    """Imports go down; on one floor only to rows above; the package's own head imports nothing."""
    names = [name for _, name in FLOORS]
    house = {name: (floor, row) for row, (floor, name) in enumerate(FLOORS)}
    if source.name not in house and source.name != "__init__":
        yield at(source, source.tree, "not in the table of floors (tests/test_house_rules.py)")
        return
    for node, imported in imports_of(source.tree):
        parts = imported.split(".")
        if parts[0] != "plant2":
            continue
        if len(parts) == 1 or parts[1].startswith("__version__"):
            continue
        target = parts[1]
        if target not in house:
            yield at(source, node, f"imports {target}, which is not in the table of floors")
        elif source.name == "__init__":
            yield at(source, node, f"imports {target}: the package's head imports nothing")
        elif house[target][1] >= house[source.name][1]:
            yield at(
                source,
                node,
                f"imports {target} (floor {house[target][0]}, row {names.index(target)}) from "
                f"floor {house[source.name][0]}, row {names.index(source.name)}: go down only",
            )


def owners(source: Source) -> Iterator[str]:
    """A library with an owner is imported by its owner only; an unknown one gets an owner first."""
    for node, imported in imports_of(source.tree):
        top = imported.split(".")[0]
        known = [name for name in OWNERS if imported == name or imported.startswith(name + ".")]
        if known:
            allowed = OWNERS[max(known, key=len)]
            if source.name not in allowed:
                owner = ", ".join(allowed) or "nobody"
                yield at(source, node, f"imports {imported}, owned by {owner}")
        elif top not in FREE | {"plant2"} and top not in sys.stdlib_module_names:
            yield at(source, node, f"imports {top}, which has no owner in the table")


def heavy_inside_functions(source: Source) -> Iterator[str]:
    """Heavy libraries are imported inside the function that needs them."""
    loaded = ast.Module(body=[], type_ignores=[])
    for node in at_load_time(source.tree):
        if isinstance(node, ast.Import | ast.ImportFrom):
            loaded.body.append(node)
    seen = set()
    for node, imported in imports_of(loaded):
        top = imported.split(".")[0]
        if top in HEAVY and (id(node), top) not in seen:
            seen.add((id(node), top))
            yield at(source, node, f"loads {top} with the module; import it inside the function")


def silence(source: Source) -> Iterator[str]:
    """Only the command line prints or ends the program."""
    if source.name in SPEAKERS:
        return
    enders = {"print", "exit", "quit", "sys.exit", "os._exit", "SystemExit"}
    for node in ast.walk(source.tree):
        if isinstance(node, ast.Call) and ast.unparse(node.func) in enders:
            yield at(source, node, f"calls {ast.unparse(node.func)}; raise an error of the house")
        elif isinstance(node, ast.Raise) and node.exc is not None:
            if ast.unparse(node.exc) == "SystemExit":
                yield at(source, node, "raises SystemExit; raise an error of the house")


def named_exceptions(source: Source) -> Iterator[str]:
    """No bare except: it would swallow an interrupt and every slip of ours."""
    for node in ast.walk(source.tree):
        if isinstance(node, ast.ExceptHandler) and node.type is None:
            yield at(source, node, "bare except; name what is expected")


def plain_facts(source: Source) -> Iterator[str]:
    """A dataclass is frozen, slotted and keyword-only; a private one may be a working record."""
    for node in ast.walk(source.tree):
        if not isinstance(node, ast.ClassDef):
            continue
        for mark in node.decorator_list:
            call = mark if isinstance(mark, ast.Call) else None
            if ast.unparse(call.func if call else mark) not in {
                "dataclass",
                "dataclasses.dataclass",
            }:
                continue
            given = {
                word.arg
                for word in (call.keywords if call else [])
                if isinstance(word.value, ast.Constant) and word.value.value is True
            }
            wanted = {"slots"} if node.name.startswith("_") else {"frozen", "slots", "kw_only"}
            for missing in sorted(wanted - given):
                yield at(source, node, f"dataclass {node.name} without {missing}=True")


def finished(source: Source) -> Iterator[str]:
    """Nothing raises NotImplementedError, and no public function is an empty shell."""
    for node in ast.walk(source.tree):
        if isinstance(node, ast.Raise) and node.exc is not None:
            if ast.unparse(node.exc).startswith("NotImplementedError"):
                yield at(source, node, "raises NotImplementedError")


# -------------------------------------------------------------------------- docstrings (numpydoc)


def sections_of(text: str) -> dict[str, list[str]]:
    """Lines of a numpydoc docstring by section; the summary under the empty name."""
    lines = inspect.cleandoc(text).splitlines()
    found: dict[str, list[str]] = {"": []}
    current = ""
    for number, line in enumerate(lines):
        following = lines[number + 1] if number + 1 < len(lines) else ""
        if line.strip() and re.fullmatch(r"-{3,}", following.strip()):
            current = line.strip()
            found[current] = []
        elif not re.fullmatch(r"-{3,}", line.strip()):
            found[current].append(line)
    return found


def entries_of(lines: list[str]) -> dict[str, str]:
    """Entries of a Parameters section by name, each with its type and description."""
    found: dict[str, str] = {}
    names: list[str] = []
    for line in lines:
        if line.strip() and not line.startswith(" "):
            names = [name.strip().lstrip("*") for name in line.split(" :")[0].split(",")]
            for name in names:
                found[name] = line.partition(" :")[2]
        else:
            for name in names:
                found[name] += "\n" + line
    return found


def is_real_valued(annotation: ast.expr | None) -> bool:
    """Tell whether an annotation speaks of real or complex numbers or arrays of them."""
    if annotation is None:
        return False
    text = ast.unparse(annotation)
    # What a callback is handed is told in words.
    return "Callable" not in text and bool(
        re.search(r"\b(float|complex|float64|complex128|floating)\b", text)
    )


def documented_parameters(
    source: Source, node: ast.AST, title: str, parameters: dict[str, ast.expr | None], doc: str
) -> Iterator[str]:
    """Complaints about parameters that are not described, or real numbers without a unit."""
    sections = sections_of(doc)
    entries = entries_of(sections.get("Parameters", [])) | entries_of(
        sections.get("Attributes", [])
    )
    for name, annotation in parameters.items():
        if name not in entries:
            yield at(source, node, f"{title}: parameter {name} is not described")
        elif is_real_valued(annotation) and not re.search(r"\[[^\]]+\]|`unit`", entries[name]):
            yield at(source, node, f"{title}: parameter {name} has no [unit]")


def names_of(error: str) -> set[str]:
    """Names under which a Raises section may announce an error: its own, or a built-in parent's."""
    name = error.split(".")[-1]
    kind = getattr(builtins, name, None)
    if not isinstance(kind, type):
        return {name}
    return {parent.__name__ for parent in kind.__mro__} - {"object", "BaseException", "Exception"}


def raised_by(node: ast.AST, caught: frozenset[str] = frozenset()) -> Iterator[str]:
    """Names of the errors that a block raises and does not itself catch."""
    if isinstance(node, ast.Raise) and node.exc is not None:
        name = ast.unparse(node.exc).split("(")[0]
        if not (names_of(name) | {"Exception", "BaseException"}) & caught:
            yield name
    inner = caught
    if isinstance(node, ast.Try):
        inner = caught.union(
            *(re.findall(r"\w+", ast.unparse(handler.type)) for handler in node.handlers)
            if all(handler.type for handler in node.handlers)
            else []
        )
    for name, value in ast.iter_fields(node):
        children = value if isinstance(value, list) else [value]
        for child in children:
            if isinstance(child, ast.AST):
                yield from raised_by(child, inner if name == "body" else caught)


def function_docs(
    source: Source, node: ast.FunctionDef | ast.AsyncFunctionDef, *, title: str, method: bool
) -> Iterator[str]:
    """Complaints about the docstring of one public function."""
    doc = ast.get_docstring(node)
    if not doc:
        yield at(source, node, f"{title}: no docstring")
        return
    sections = sections_of(doc)
    if not sections[""] or not re.search(r"[.:?](\s\[[^\]]+\])?$", doc.split("\n\n")[0].strip()):
        yield at(source, node, f"{title}: the summary is no sentence")
    if source.name in SPEAKERS:
        return
    marks = {ast.unparse(mark).split("(")[0] for mark in node.decorator_list}
    arguments = node.args
    listed = arguments.posonlyargs + arguments.args + arguments.kwonlyargs
    if method and "staticmethod" not in marks:
        listed = listed[1:]
    listed += [extra for extra in (arguments.vararg, arguments.kwarg) if extra]
    parameters = {argument.arg: argument.annotation for argument in listed}
    yield from documented_parameters(source, node, title, parameters, doc)
    is_property = bool(marks & {"property", "cached_property", "functools.cached_property"})
    returns = ast.unparse(node.returns) if node.returns else "None"
    if returns not in {"None", "NoReturn", "Never"} and not is_property:
        if not {"Returns", "Yields"} & set(sections):
            yield at(source, node, f"{title}: no Returns section")
    raised = set(raised_by(node)) - {"AssertionError"}
    if raised and "Raises" not in sections:
        yield at(source, node, f"{title}: raises {', '.join(sorted(raised))}, no Raises section")
    elif raised:
        told = "\n".join(sections["Raises"])
        for name in sorted(raised):
            if name.endswith("Error") and not names_of(name) & set(re.findall(r"\w+", told)):
                yield at(source, node, f"{title}: Raises does not name {name}")
    sourced = {"Notes", "References"} & set(sections) or re.search(r"^Source: \S", doc, re.M)
    if not method and not sourced:
        yield at(source, node, f"{title}: no Notes, References or Source")


def documented(source: Source) -> Iterator[str]:
    """Modules, public functions, classes and methods say what they are, with units and sources."""
    if not ast.get_docstring(source.tree):
        yield at(source, source.tree, "no docstring at the head of the file")
    for node in source.tree.body:
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            if not node.name.startswith("_"):
                yield from function_docs(source, node, title=node.name, method=False)
        elif isinstance(node, ast.ClassDef) and not node.name.startswith("_"):
            yield from class_docs(source, node)


def class_docs(source: Source, node: ast.ClassDef) -> Iterator[str]:
    """Complaints about a public class: its own docstring, its fields, its public methods."""
    doc = ast.get_docstring(node)
    if not doc:
        yield at(source, node, f"{node.name}: no docstring")
        return
    if any("dataclass" in ast.unparse(mark) for mark in node.decorator_list):
        fields = {
            field.target.id: field.annotation
            for field in node.body
            if isinstance(field, ast.AnnAssign)
            and isinstance(field.target, ast.Name)
            and not field.target.id.startswith("_")
            and "ClassVar" not in ast.unparse(field.annotation)
        }
        yield from documented_parameters(source, node, node.name, fields, doc)
    for inner in node.body:
        if isinstance(inner, ast.FunctionDef) and not inner.name.startswith("_"):
            title = f"{node.name}.{inner.name}"
            yield from function_docs(source, inner, title=title, method=True)


RULES: tuple[Rule, ...] = (
    floors,
    owners,
    heavy_inside_functions,
    silence,
    named_exceptions,
    plain_facts,
    finished,
    documented,
)

MODULES = sorted(PACKAGE.glob("**/*.py"))


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.__name__)
@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.stem)
def test_package_keeps_the_rule(path: Path, rule: Rule) -> None:
    complaints = list(rule(read_source(path)))
    if complaints:
        pytest.fail(f"{rule.__doc__}\n" + "\n".join(complaints), pytrace=False)


GOOD = '''
def area(side: float) -> float:
    """Area of a square.

    Parameters
    ----------
    side : float
        At least 0. [m]

    Returns
    -------
    float
        The area. [m^2]

    Raises
    ------
    ValueError
        If the side is negative.

    Notes
    -----
    side^2.
    """
    if side < 0:
        raise ValueError(side)
    return side * side
'''

CAUGHT = GOOD.replace(
    "    return side * side",
    "    try:\n        raise KeyError(side)\n    except LookupError:\n        return side * side",
)

OFFENCES: tuple[tuple[Rule, str, str, str], ...] = (
    (floors, "stranger", "", "not in the table of floors"),
    (floors, "plant", "from plant2.sampled import hold", "imports sampled"),
    (floors, "plant", "def f():\n    from plant2 import cli", "imports cli"),
    (floors, "loopfile", "from .plant import Plant", "imports plant"),
    (floors, "quantity", "import plant2.solve", "imports solve"),
    (floors, "plant", "from plant2.nowhere import x", "imports nowhere"),
    (floors, "__init__", "from plant2.errors import Plant2Error", "imports nothing"),
    (owners, "plant", "import pint", "owned by quantity"),
    (owners, "design", "from scipy import optimize", "owned by solve"),
    (owners, "design", "from scipy.optimize import brentq", "owned by solve"),
    (owners, "design", "import scipy.signal", "owned by nobody"),
    (owners, "design", "import sympy", "no owner"),
    (heavy_inside_functions, "plant", "import control", "loads control"),
    (
        heavy_inside_functions,
        "solve",
        "try:\n    from scipy import optimize\nfinally:\n    pass",
        "",
    ),
    (heavy_inside_functions, "report", "class A:\n    import matplotlib.pyplot", "matplotlib"),
    (silence, "plant", "print(1)", "calls print"),
    (silence, "plant", "import sys\nsys.exit(1)", "calls sys.exit"),
    (silence, "plant", "raise SystemExit", "raises SystemExit"),
    (named_exceptions, "plant", "try:\n    pass\nexcept:\n    pass", "bare except"),
    (plain_facts, "plant", "@dataclass\nclass A:\n    x: int", "without frozen"),
    (plain_facts, "plant", "@dataclass(frozen=True, slots=True)\nclass A: ...", "without kw_only"),
    (plain_facts, "plant", "@dataclass\nclass _A:\n    x: int", "_A without slots"),
    (plain_facts, "plant", "@dataclass(frozen=False, slots=True, kw_only=True)\nclass A: ...", ""),
    (finished, "plant", "def f():\n    raise NotImplementedError", "NotImplementedError"),
    (documented, "plant", "x = 1", "no docstring at the head"),
    (documented, "plant", "def f() -> None: ...", "f: no docstring"),
    (documented, "plant", "class A: ...", "A: no docstring"),
    (documented, "plant", GOOD.replace("square.", "square"), "no sentence"),
    (documented, "plant", GOOD.replace("side : float", "other : float"), "side is not described"),
    (documented, "plant", GOOD.replace(" [m]\n", "\n"), "side has no [unit]"),
    (documented, "plant", GOOD.replace("Returns\n    -------", ""), "no Returns"),
    (documented, "plant", GOOD.replace("Raises\n    ------", ""), "no Raises section"),
    (documented, "plant", GOOD.replace("    ValueError\n", "    KeyError\n"), "does not name"),
    (documented, "plant", GOOD.replace("Notes\n    -----", ""), "no Notes"),
    (documented, "plant", CAUGHT.replace("KeyError", "OSError"), "Raises does not name OSError"),
    (
        documented,
        "plant",
        '@dataclass\nclass A:\n    """Facts.\n\n    Parameters\n    ----------\n'
        '    x : float\n        Ex. [m]\n    """\n    x: float\n    y: float',
        "A: parameter y is not described",
    ),
)


@pytest.mark.parametrize(
    ("rule", "module", "text", "expected"),
    OFFENCES,
    ids=[f"{rule.__name__}-{number}" for number, (rule, *_) in enumerate(OFFENCES)],
)
def test_rule_finds_the_planted_offence(rule: Rule, module: str, text: str, expected: str) -> None:
    label = f"plant2/{module}.py"
    complaints = list(rule(Source(name=module, label=label, tree=ast.parse(text))))
    assert any(expected in complaint for complaint in complaints), complaints
    assert all(complaint.startswith(f"{label}:") for complaint in complaints)


@pytest.mark.parametrize("code", [GOOD, CAUGHT], ids=["good", "caught"])
def test_rules_are_content_with_good_code(code: str) -> None:
    text = (
        '"""Areas."""\n'
        "from typing import TYPE_CHECKING\n"
        "import numpy as np\n"
        "from plant2 import __version__\n"
        "from plant2.errors import OutOfRangeError\n"
        "if TYPE_CHECKING:\n    import control\n" + code
    )
    source = Source(name="plant", label="plant2/plant.py", tree=ast.parse(text))
    assert [complaint for rule in RULES for complaint in rule(source)] == []


# ------------------------------------------------------------------------------- tests that test


def asserting_names(tree: ast.Module) -> set[str]:
    """Names of a test file's functions that can fail by a check, their own or a called one's."""
    functions = {
        node.name: node
        for node in ast.walk(tree)
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef)
    }
    imported = {
        alias.asname or alias.name
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
    }
    checkers = {"pytest.raises", "pytest.warns", "pytest.fail"}

    def calls(node: ast.AST) -> set[str]:
        return {ast.unparse(inner.func) for inner in ast.walk(node) if isinstance(inner, ast.Call)}

    def checks(node: ast.AST) -> bool:
        if any(isinstance(inner, ast.Assert) for inner in ast.walk(node)):
            return True
        called = calls(node)
        outside = {name for name in called if name.split(".")[-1].startswith(("assert_", "check_"))}
        return bool(
            called & checkers or {name.split(".")[0] for name in outside} & imported
        ) or any(".testing.assert" in name for name in called)

    found = {name for name, node in functions.items() if checks(node)}
    while True:
        more = {
            name for name, node in functions.items() if name not in found and calls(node) & found
        }
        if not more:
            return found
        found |= more


TEST_FILES = sorted((ROOT / "tests").glob("**/test_*.py"))


@pytest.mark.parametrize("path", TEST_FILES, ids=lambda path: path.stem)
def test_every_test_can_fail(path: Path) -> None:
    source = read_source(path)
    able = asserting_names(source.tree)
    idle = [
        at(source, node, f"{node.name} checks nothing")
        for node in ast.walk(source.tree)
        if isinstance(node, ast.FunctionDef)
        and node.name.startswith("test_")
        and node.name not in able
    ]
    if idle:
        pytest.fail("\n".join(idle), pytrace=False)


def test_idle_test_is_found() -> None:
    text = (
        "def test_idle():\n    run()\ndef test_busy():\n    helper()\ndef helper():\n    assert 1"
    )
    assert asserting_names(ast.parse(text)) == {"test_busy", "helper"}


# ------------------------------------------------------------------------------- texts of all kinds


def texts() -> list[Path]:
    """Every text file of the checkout that people read or that ends up with users."""
    folders = ("plant2", "templates", "tests", "examples", "docs", ".ci")
    found = [path for folder in folders for path in (ROOT / folder).glob("**/*")]
    found += [*ROOT.glob("*.md"), *ROOT.glob("*.toml"), ROOT / "Makefile", ROOT / "LICENSE"]
    return sorted(
        path
        for path in found
        if path.is_file() and path.suffix in TEXT_SUFFIXES and "__pycache__" not in path.parts
    )


# Written in pieces, so that this file keeps its own rule.
UNFINISHED = re.compile(
    r"\b(" + "|".join(("TO" + "DO", "FIX" + "ME", "X" + "XX", "HA" + "CK")) + r")\b"
)
MACHINE_PATH = re.compile(
    r"(?<![\w.~])/("
    + "|".join(("work", "home", "root", "Users", "tmp", "opt"))
    + r")/|[A-Z]:\\Users"
)


def complaints_about(text: str, label: str) -> list[str]:
    """Lines that leave work for later, or that name a place on someone's machine."""
    found = []
    for number, line in enumerate(text.splitlines(), 1):
        if UNFINISHED.search(line):
            found.append(
                f"{label}:{number}: a note for later; finish it or write it down elsewhere"
            )
        if MACHINE_PATH.search(line):
            found.append(f"{label}:{number}: a path of one machine")
    return found


def test_texts_are_finished_and_name_no_machine() -> None:
    found = [
        complaint
        for path in texts()
        for complaint in complaints_about(
            path.read_text("utf-8"), path.relative_to(ROOT).as_posix()
        )
    ]
    if found:
        pytest.fail("\n".join(found), pytrace=False)


@pytest.mark.parametrize(
    "line",
    ["# " + "TO" + "DO: later", 'open("' + "/ho" + 'me/a")', "C:" + "\\Users\\a", "FIX" + "ME"],
)
def test_planted_text_offence_is_found(line: str) -> None:
    assert complaints_about(f"x = 1\n{line}\n", "a.py")[0].startswith("a.py:2: ")


# ------------------------------------------------------------------------------------ at run time


def modules_after(code: str, cwd: Path) -> set[str]:
    """Top-level names in sys.modules of a fresh interpreter after `code` ran well."""
    program = (
        f"import sys\nsys.path.insert(0, {str(ROOT)!r})\n{code}\nimport json, sys\n"
        "names = sorted({name.split('.')[0] for name in sys.modules})\n"
        "print('\\n' + json.dumps(names))"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, cwd=cwd, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return set(json.loads(done.stdout.splitlines()[-1]))


def run_plant2(*arguments: str) -> str:
    """Python text that runs the command line in its own process and goes on when it ends well."""
    return (
        "import sys\n"
        f"sys.argv = ['plant2', *{list(arguments)!r}]\n"
        "from plant2.cli import main\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n    assert not end.code, end.code\n"
    )


def test_loading_every_module_loads_nothing_heavy(tmp_path: Path) -> None:
    names = [f"plant2.{path.stem}" for path in MODULES if path.stem not in {"__init__", "__main__"}]
    assert names
    assert not HEAVY & modules_after(f"import {', '.join(names)}", tmp_path)


def test_check_loads_nothing_heavy(tmp_path: Path) -> None:
    loop = ROOT / "examples" / "focus_stage" / "loop.toml"
    assert not HEAVY & modules_after(run_plant2("check", str(loop)), tmp_path)


def test_help_loads_the_command_line_only(tmp_path: Path) -> None:
    loaded = modules_after(run_plant2("--help"), tmp_path)
    assert "typer" in loaded
    assert not (HEAVY | FREE | {"pint", "pydantic", "jinja2", "tomlkit"}) & loaded


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.stem)
def test_examples_in_docstrings_hold(path: Path) -> None:
    if path.stem == "__main__":
        assert not doctest.DocTestParser().get_examples(path.read_text("utf-8"))
        return
    name = "plant2" if path.stem == "__init__" else f"plant2.{path.stem}"
    assert doctest.testmod(importlib.import_module(name)).failed == 0


# ------------------------------------------------------------------------- the papers of the house


def test_every_library_is_declared_with_a_lower_bound() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["project"]
    declared = {}
    extras = [line for lines in project["optional-dependencies"].values() for line in lines]
    for line in project["dependencies"] + extras:
        match = re.fullmatch(r"([A-Za-z0-9_.-]+)(>=[0-9.]+)", line)
        assert match, f"pyproject.toml: {line}: no lower bound, or more than that"
        declared[match[1].lower()] = match[2]
    distributions = importlib.metadata.packages_distributions()
    # Brought along by a library that is declared, and part of its face.
    part_of = {"markupsafe": "jinja2"}
    used = {
        imported.split(".")[0]
        for path in MODULES
        for _, imported in imports_of(read_source(path).tree)
    } - set(sys.stdlib_module_names)
    for name in sorted(used - {"plant2"}):
        known_as = {part_of.get(name, name)} | {d.lower() for d in distributions.get(name, [])}
        assert known_as & set(declared), f"pyproject.toml does not declare {name}"


def test_floors_in_the_developers_guide_agree_with_the_table() -> None:
    """`| floor | file | purpose | libraries it owns |`: files and import names in backticks."""
    guide = ROOT / "DEVELOPERS.md"
    if not guide.exists():
        pytest.skip("DEVELOPERS.md is not there to compare the table of floors with")
    rows = []
    claims = set()
    for line in guide.read_text("utf-8").splitlines():
        cells = [cell.strip() for cell in line.strip().strip("|").split("|")]
        if len(cells) != 4 or not cells[0].isdigit():
            continue
        files = re.findall(r"`(\w+)\.py`", cells[1])
        rows += [(int(cells[0]), name) for name in files]
        claims |= {(library, tuple(files)) for library in re.findall(r"`([\w.]+)`", cells[3])}
    assert tuple(rows) == FLOORS
    for library, files in claims:
        assert set(files) & set(OWNERS.get(library, ())), f"{library} is not owned by {files}"
    for library, names in OWNERS.items():
        for name in names:
            assert any(library == claimed and name in files for claimed, files in claims), (
                f"DEVELOPERS.md does not say that {name} owns {library}"
            )
