"""The house keeps its shape: imports go down only, and nothing grows too large to read."""

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

import reconcile
from reconcile.campaign.kinds import KINDS, TABLE_KINDS

PACKAGE = Path(reconcile.__file__).parent
MODULES = sorted(PACKAGE.rglob("*.py"))

# From the bottom to the top; what stands side by side does not import each other. `physics` is apart: see below.
LAYERS = (
    {"campaign"},
    {"read", "measure"},
    {"gather"},
    {"inference"},
    {"report"},
    {"invent"},
    {"closeout", "example", "predict"},
    {"notebook"},
    {"cli"},
    {"__main__"},
)
RANK = {name: rank for rank, layer in enumerate(LAYERS) for name in layer}
USES_PHYSICS = {"physics", "inference", "invent", "example"}

# Nothing heavy may be loaded by these on import.
LIGHT = {"__init__", "__main__", "cli", "campaign"}
HEAVY = {
    "numpy",
    "scipy",
    "pandas",
    "matplotlib",
    "emcee",
    "arviz_stats",
    "openpyxl",
    "xlsxwriter",
    "h5py",
    "h5netcdf",
    "jinja2",
    "typst",
}

MOST_LINES, MOST_FUNCTION_LINES, MOST_PARAMETERS = 500, 60, 7


def part(module: Path) -> str:
    """Return the part of the package that a module belongs to."""
    return module.relative_to(PACKAGE).parts[0].removesuffix(".py")


def tree(module: Path) -> ast.Module:
    return ast.parse(module.read_text(encoding="utf-8"))


def imported(module: Path) -> Iterator[tuple[int, str]]:
    """Yield line and full name of everything imported, wherever in the module the import stands."""
    package = ("reconcile", *module.relative_to(PACKAGE).parent.parts)
    for node in ast.walk(tree(module)):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) - node.level + 1]) if node.level else ""
            source = ".".join(name for name in (base, node.module) if name)
            yield from ((node.lineno, f"{source}.{alias.name}") for alias in node.names)


def our_parts(module: Path) -> Iterator[tuple[int, str]]:
    """Yield line and part of the package for every import of ours."""
    parts = {*RANK, "physics"}
    for line, name in imported(module):
        words = name.split(".")
        if words[0] == "reconcile" and len(words) > 1 and words[1] in parts:
            yield line, words[1]


def may_import(importer: str, other: str) -> bool:
    if importer == other or importer == "__init__":
        return True
    if other == "physics":
        return importer in USES_PHYSICS
    return importer != "physics" and RANK[other] < RANK[importer]


def functions(module: Path) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    return (node for node in ast.walk(tree(module)) if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef))


def reasoned(module: Path, node: ast.AST) -> bool:
    """Tell whether `# reason:` stands beside what breaks a rule: on its line, or on a line of a function's signature."""
    lines = module.read_text(encoding="utf-8").splitlines()
    last = node.body[0].lineno - 1 if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef) else node.lineno
    return any("# reason:" in line for line in lines[node.lineno - 1 : max(last, node.lineno)])


def name_of(module: Path) -> str:
    return module.relative_to(PACKAGE.parent).as_posix()


@pytest.mark.parametrize("module", MODULES, ids=name_of)
def test_every_module_belongs_to_a_layer_and_imports_only_downwards(module):
    home = part(module)
    assert home == "__init__" or home == "physics" or home in RANK, f"{home} stands in no layer"
    upward = [
        f"line {line}: {home} imports {other}" for line, other in our_parts(module) if not may_import(home, other)
    ]
    assert upward == []


def test_the_rule_of_layers_itself_refuses_what_it_should():
    assert may_import("report", "inference")
    assert may_import("inference", "physics")
    assert not may_import("inference", "report")
    assert not may_import("read", "measure")
    assert not may_import("report", "physics")
    assert not may_import("physics", "campaign")


@pytest.mark.parametrize("module", [module for module in MODULES if part(module) in LIGHT], ids=name_of)
def test_the_light_part_loads_nothing_heavy_at_its_top(module):
    top = [node for node in tree(module).body if isinstance(node, ast.Import | ast.ImportFrom)]
    lines = {node.lineno for node in top}
    assert [name for line, name in imported(module) if line in lines and name.split(".")[0] in HEAVY] == []


@pytest.mark.parametrize("module", MODULES, ids=name_of)
def test_a_module_can_be_read_in_one_sitting(module):
    lines = module.read_text(encoding="utf-8").splitlines()
    assert len(lines) <= MOST_LINES or "# reason:" in lines[0]


@pytest.mark.parametrize("module", MODULES, ids=name_of)
def test_functions_are_short_and_take_few_arguments(module):
    problems = []
    for node in functions(module):
        documented = ast.get_docstring(node) is not None
        first = node.body[1] if documented and len(node.body) > 1 else node.body[0]
        length = node.end_lineno - first.lineno + 1  # the docstring is not counted
        every = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
        parameters = [arg.arg for arg in every if arg.arg not in ("self", "cls")]
        if reasoned(module, node):
            continue
        if length > MOST_FUNCTION_LINES:
            problems.append(f"{node.name}: {length} lines")
        if len(parameters) > MOST_PARAMETERS:
            problems.append(f"{node.name}: {len(parameters)} parameters")
    assert problems == []


@pytest.mark.parametrize("module", [module for module in MODULES if module.name != "kinds.py"], ids=name_of)
def test_kinds_are_told_apart_by_a_table_and_not_by_ifs(module):
    found = []
    for node in ast.walk(tree(module)):
        for compare in ast.walk(node.test) if isinstance(node, ast.If | ast.IfExp) else ():
            if isinstance(compare, ast.Compare) and isinstance(compare.ops[0], ast.Eq | ast.NotEq):
                sides = [compare.left, *compare.comparators]
                names = {getattr(side, "id", None) or getattr(side, "attr", None) for side in sides}
                constants = {side.value for side in sides if isinstance(side, ast.Constant)}
                if "kind" in names and constants & {*KINDS, *TABLE_KINDS} and not reasoned(module, compare):
                    found.append(f"line {compare.lineno}")
    assert found == []


@pytest.mark.parametrize("module", MODULES, ids=name_of)
def test_errors_are_never_swallowed_whole(module):
    too_wide = {None, "Exception", "BaseException"}
    handlers = [node for node in ast.walk(tree(module)) if isinstance(node, ast.ExceptHandler)]
    caught = [
        (node.lineno, getattr(node.type, "id", None))
        for node in handlers
        if not isinstance(node.type, ast.Tuple | ast.Attribute)
    ]
    assert [line for line, name in caught if name in too_wide] == []


@pytest.mark.parametrize("module", [module for module in MODULES if part(module) != "cli"], ids=name_of)
def test_only_the_command_line_prints_or_exits(module):
    calls = [node for node in ast.walk(tree(module)) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)]
    assert [node.lineno for node in calls if node.func.id in ("print", "exit", "quit")] == []
