"""The project's rules, kept by tests: layers, sizes, names, errors, what may stand where."""

from __future__ import annotations

import ast
import io
import re
import subprocess
import sys
import tokenize
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
MODULE_LINES = 400
BODY_LINES = 40
SIGNIFICANT_DIGITS = 5

# Data flows down these lists: a module may import those before it, never those after it.
FIELDLINES_ORDER = [
    "constants",
    "errors",
    "dipole",
    "density",
    "coldplasma",
    "ground",
    "line",
    "traveltime",
    "nose",
    "tube",
    "climatology",
]
WHISTLER_ORDER = [
    "errors",
    "stopping",
    "station",
    "settings",
    "model",
    "containers",
    "riff",
    "broadcastwave",
    "clock",
    "audiofile",
    "survey",
    "recording",
    "sferic",
    "cleaning",
    "spectrogram",
    "bank",
    "curvesum",
    "chance",
    "rowplan",
    "search",
    "trace",
    "pattern",
    "scatter",
    "problem",
    "fit",
    "likelihood",
    "uncertainty",
    "follow",
    "discovery",
    "evidence",
    "group",
    "rows",
    "settle",
    "pathnumbers",
    "results",
    "measure",
    "savefile",
    "catalogue",
    "proportions",
    "figures",
    "picks",
    "edit",
    "editfile",
    "handfit",
    "pickfit",
    "saved",
    "prediction",
    "synthesis",
    "night",
    "pieces",
    "recovery",
    "injection",
    "completeness",
    "scores",
    "scorefiles",
    "commands",
    "cli",
]
SYNTHESIS_MAY_IMPORT = ("errors", "settings", "savefile", "synthesis")
TOP_LEVEL = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    "whistler",
    "fieldlines",
    "tests",
    "demo_recordings",
    "notebooks",
}

DIMENSIONED = re.compile(
    r"(^|_)(frequency|frequencies|time|times|delay|density|altitude|distance|length|rate|duration"
    r"|band|bandwidth|speed|velocity|angle|latitude|longitude|offset|period|width|field|height"
    r"|radius|interval|window|hop|path|resolution|uncertainty|moment|content|dispersion)(_sd)?$"
)
WITHOUT_UNIT = {  # of SI quantities
    "log_frequency",
    "log_time",
    "log_density",
    "log_tube_content",
    "log_tube_content_sd",
    "sin_latitude",
}


def tracked() -> list[Path]:
    """Files of the project: what git knows, or what is there in a copy without git."""
    if (ROOT / ".git").exists():
        listing = subprocess.run(
            ["git", "-C", str(ROOT), "ls-files", "-z"], capture_output=True, check=True
        )
        names = listing.stdout.decode().split("\0")
        return [ROOT / name for name in names if name and (ROOT / name).is_file()]
    return [
        path
        for path in ROOT.rglob("*")
        if path.is_file()
        and not any(
            part.startswith(".") or part == "__pycache__" for part in path.relative_to(ROOT).parts
        )
    ]


def modules(package: str) -> list[Path]:
    return sorted(path for path in (ROOT / package).rglob("*.py"))


def dotted(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def where(path: Path, node: ast.AST) -> str:
    return f"{path.relative_to(ROOT)}:{getattr(node, 'lineno', 0)}"


def tree_of(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


PACKAGE_MODULES = [*modules("fieldlines"), *modules("whistler")]


def nodes() -> Iterator[tuple[Path, ast.AST]]:
    for path in PACKAGE_MODULES:
        for node in ast.walk(tree_of(path)):
            yield path, node


def imports(path: Path) -> Iterator[tuple[str, ast.AST]]:
    """Every module a file imports, with ``from package import module`` resolved."""
    known = {dotted(other) for other in PACKAGE_MODULES}
    for node in ast.walk(tree_of(path)):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{where(path, node)}: relative import"
            base = node.module or ""
            for alias in node.names:
                whole = f"{base}.{alias.name}"
                yield (whole if whole in known else base), node


def rank(name: str, order: list[str]) -> int:
    parts = name.split(".")
    return order.index(parts[1]) if len(parts) > 1 else -1


@pytest.mark.parametrize(
    ("package", "order"), [("fieldlines", FIELDLINES_ORDER), ("whistler", WHISTLER_ORDER)]
)
def test_every_module_has_its_place_in_the_order(package: str, order: list[str]) -> None:
    names = {dotted(path).split(".")[1] for path in modules(package) if dotted(path) != package}
    assert sorted(names - set(order)) == []


@pytest.mark.parametrize(
    ("package", "order"), [("fieldlines", FIELDLINES_ORDER), ("whistler", WHISTLER_ORDER)]
)
def test_imports_run_one_way(package: str, order: list[str]) -> None:
    wrong = []
    for path in modules(package):
        own = dotted(path)
        if own == package:
            continue
        for name, node in imports(path):
            same_folder = name.split(".")[:2] == own.split(".")[:2]
            upward = name.startswith(f"{package}.") and rank(name, order) >= rank(own, order)
            if upward and not same_folder:
                wrong.append(f"{where(path, node)} imports {name}")
    assert wrong == []


def test_physics_stands_on_standard_library_numpy_scipy_only() -> None:
    allowed = {*sys.stdlib_module_names, "numpy", "scipy", "fieldlines"}
    wrong = [
        f"{where(path, node)} imports {name}"
        for path in modules("fieldlines")
        for name, node in imports(path)
        if name.split(".")[0] not in allowed
    ]
    assert wrong == []


def test_synthesis_knows_nothing_of_the_analysis() -> None:
    """Otherwise the analysis would be tested against itself."""
    wrong = [
        f"{where(path, node)} imports {name}"
        for path in modules("whistler/synthesis")
        for name, node in imports(path)
        if name.split(".")[0] == "whistler"
        and name != "whistler"
        and name.split(".")[1] not in SYNTHESIS_MAY_IMPORT
    ]
    assert wrong == []


def test_no_cycles_within_commands_and_synthesis() -> None:
    for folder in ("whistler/synthesis", "whistler/commands"):
        graph = {
            dotted(path): {name for name, _ in imports(path)} - {dotted(path)}
            for path in modules(folder)
        }
        while graph:  # take away what imports nothing that is left
            free = {name for name, needs in graph.items() if not needs & set(graph)}
            assert free, f"cycle among {sorted(graph)}"
            graph = {name: needs for name, needs in graph.items() if name not in free}


def test_modules_are_short() -> None:
    lengths = {path: len(path.read_text().splitlines()) for path in PACKAGE_MODULES}
    assert [f"{dotted(path)}: {n}" for path, n in lengths.items() if n > MODULE_LINES] == []


def test_function_bodies_are_short() -> None:
    long = []
    for path, node in nodes():
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            first = 1 if ast.get_docstring(node) is not None else 0
            body = node.body[first:]
            if body:
                lines = (body[-1].end_lineno or 0) - body[0].lineno + 1
                if lines > BODY_LINES:
                    long.append(f"{where(path, node)} {node.name}: {lines}")
    assert long == []


def test_no_module_is_called_utils() -> None:
    assert [dotted(path) for path in PACKAGE_MODULES if "utils" in dotted(path)] == []


def called(node: ast.AST) -> str:
    return ast.unparse(node.func) if isinstance(node, ast.Call) else ""


def test_physics_neither_prints_nor_opens_files() -> None:
    wrong = [
        f"{where(path, node)} {called(node)}"
        for path, node in nodes()
        if "fieldlines" in path.parts and called(node) in ("print", "open", "io.open")
    ]
    assert wrong == []


def test_randomness_comes_from_a_passed_generator() -> None:
    allowed = ("default_rng", "Generator", "SeedSequence")
    wrong = [
        where(path, node)
        for path, node in nodes()
        if isinstance(node, ast.Attribute)
        and ast.unparse(node.value) in ("np.random", "numpy.random")
        and node.attr not in allowed
    ]
    wrong += [
        f"{where(path, node)} imports {name}"
        for path in PACKAGE_MODULES
        for name, node in imports(path)
        if name == "random" or (name.startswith("numpy.random") and name != "numpy.random")
    ]
    assert wrong == []


def test_every_raise_says_something() -> None:
    wrong = []
    for path, node in nodes():
        if isinstance(node, ast.Raise) and node.exc is not None:
            mute_class = isinstance(node.exc, ast.Name) and node.exc.id[0].isupper()
            mute_call = isinstance(node.exc, ast.Call) and not (node.exc.args or node.exc.keywords)
            if mute_class or mute_call or isinstance(node.exc, ast.Attribute):
                wrong.append(where(path, node))
    assert wrong == []


def test_no_assert_outside_tests() -> None:
    assert [where(path, node) for path, node in nodes() if isinstance(node, ast.Assert)] == []


def significant_digits(literal: str) -> int:
    text = literal.lower().replace("_", "").rstrip("j")
    if text.startswith(("0x", "0b", "0o")):
        return 0
    return len(text.split("e")[0].replace(".", "").strip("0"))


def test_long_numbers_stand_in_constants_and_presets() -> None:
    """A bare five-digit number in a formula has lost its source."""
    assert [
        significant_digits(text) for text in ("48_000", "6.6743e-11", "0.00120", "0xFFFFF")
    ] == [
        2,
        5,
        2,
        0,
    ]
    wrong = []
    for path in PACKAGE_MODULES:
        if "constants" in path.stem or "preset" in path.stem:
            continue
        for token in tokenize.generate_tokens(io.StringIO(path.read_text()).readline):
            number = token.string if token.type == tokenize.NUMBER else "0"
            if significant_digits(number) >= SIGNIFICANT_DIGITS:
                wrong.append(f"{path.relative_to(ROOT)}:{token.start[0]} {number}")
    assert wrong == []


def measured(annotation: ast.expr | None) -> bool:
    """Whether an annotation is of floating-point numbers, which have dimensions."""
    return annotation is not None and "float" in ast.unparse(annotation).lower()


def public_definitions(path: Path) -> Iterator[ast.FunctionDef | ast.ClassDef]:
    for node in tree_of(path).body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            yield node


def public_quantities() -> Iterator[tuple[str, str]]:
    """(place, name) of each floating-point field of a public class and public argument."""
    for path in PACKAGE_MODULES:
        for node in public_definitions(path):
            if isinstance(node, ast.ClassDef):
                fields = [item for item in node.body if isinstance(item, ast.AnnAssign)]
                named = [(ast.unparse(item.target), item.annotation) for item in fields]
            else:
                arguments = [*node.args.args, *node.args.kwonlyargs]
                named = [(item.arg, item.annotation) for item in arguments if item.annotation]
            for name, annotation in named:
                if measured(annotation) and not name.startswith("_"):
                    yield f"{where(path, node)} {node.name}", name


def test_quantities_carry_their_unit_in_the_name() -> None:
    wrong = [
        f"{place}: {name}"
        for place, name in public_quantities()
        if DIMENSIONED.search(name) and name not in WITHOUT_UNIT and "commands" not in place
    ]
    assert wrong == []


def test_public_names_are_documented() -> None:
    wrong = []
    for path in PACKAGE_MODULES:
        if not ast.get_docstring(tree_of(path)):
            wrong.append(dotted(path))
        for node in public_definitions(path):
            if not ast.get_docstring(node):
                wrong.append(f"{where(path, node)} {node.name}")
    assert wrong == []


def test_nobody_takes_many_positional_arguments() -> None:
    """At most two; options and quantities of like dimension are named in the call."""
    wrong = []
    for path in PACKAGE_MODULES:
        if "commands" in path.parts:
            continue  # the command line fills those by name
        for node in public_definitions(path):
            compiled = "jit" in " ".join(map(ast.unparse, node.decorator_list))
            is_function = isinstance(node, ast.FunctionDef) and not compiled  # kernels take arrays
            if is_function and len(node.args.args) + len(node.args.posonlyargs) > 2:
                wrong.append(f"{where(path, node)} {node.name}")
    assert wrong == []


def test_only_the_agreed_entries_at_the_top() -> None:
    entries = {path.relative_to(ROOT).parts[0] for path in tracked()}
    assert {name for name in entries if not name.startswith(".")} - TOP_LEVEL == set()


def lines_matching(pattern: str, *, but: str = "") -> list[str]:
    expression = re.compile(pattern, re.IGNORECASE)
    found = []
    for path in tracked():
        if path.name == but or path.suffix in (".flac", ".png", ".wav"):
            continue
        text = path.read_text(encoding="utf-8", errors="replace")
        for number, line in enumerate(text.splitlines(), start=1):
            if expression.search(line):
                found.append(f"{path.relative_to(ROOT)}:{number}")
    return found


def test_the_origin_is_mentioned_in_one_place() -> None:
    words = ("lec" + "ture", "tran" + "script", "seed doc" + "ument")
    assert lines_matching("|".join(words), but="DEVELOPERS.md") == []


def test_no_machine_is_mentioned() -> None:
    folders = "|".join(("work", "root", "farm", "home"))
    hosts = "|".join(("pypi", "npmjs", "debian"))
    pattern = rf"/({folders})/|\.libr" + rf"ary|({hosts})\.o" + r"rg|python" + "hosted"
    assert lines_matching(pattern, but=".gitignore") == []


def test_every_message_code_is_listed_and_used() -> None:
    from whistler.errors import CODES

    used = set()
    for path in modules("whistler"):
        if path.name != "errors.py":
            used |= set(re.findall(r"\"([EWN]\d{3})\"", path.read_text()))
    assert used == set(CODES)
