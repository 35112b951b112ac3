"""The house: who may import whom, who may print, who may draw, how long a module may be.

The import statements are read from the source, wherever they stand: an import inside a function counts, since a cycle
hidden there is still one. The rule is the order below: a module imports only what stands before it.
"""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parent.parent / "homog"

ORDER = [
    *("version", "errors", "tensors", "files"),
    *("materials", "section", "mesh"),
    *("cell", "elements"),
    *("stars", "spatial_stars", "joint_solid", "strut_solid", "spatial_joints", "joints", "solid"),
    *("families", "assembly", "reference"),
    *("effective", "stress", "gradient"),
    *("directional", "bounds", "bands"),
    *("reasons", "results", "columns"),
    *("candidates", "brief"),
    *("store", "ranking", "engine", "screening", "recheck"),
    *("sensitivity", "problem", "tuning"),
    *("geometry", "plots"),
    "report",
    "__init__",
    *("terminal", "cli"),
    "__main__",
]

# Tighter than the order: arrays in, arrays out.
ONLY = {name: {"errors", "tensors"} for name in ("elements", "directional", "bounds", "bands")}

# Tighter than the order: a family describes points and blocks, the mechanics never knows which family it is given.
NEVER = {
    "families": {"assembly", "elements"},
    "assembly": {"families"},
}

# (importer, imported): reason. Only lazily.
ALLOWED = {
    ("effective", "columns"): "Effective.table is the data model's door to the columns",
}

MAY_PRINT = {"cli", "terminal", "__main__"}
MAY_DRAW = {"plots"}
PRINTING = {"rich", "typer", "click", "argparse"}
MOST_LINES = 500


def unit(dotted):
    """Return the module of the package that a dotted path inside it belongs to: families.planar is families."""
    return dotted.split(".")[0] if dotted else "__init__"


def modules():
    """Return the source of every module by its dotted path in the package."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE).with_suffix("").parts
        if parts[-1] == "__init__" and len(parts) > 1:
            parts = (*parts[:-1], "__init__")
        found[".".join(parts)] = path.read_text(encoding="utf-8")
    return found


def postpones(node):
    """Say whether imports below a node do not run when the module is imported."""
    if isinstance(node, ast.If):
        return isinstance(node.test, ast.Name) and node.test.id == "TYPE_CHECKING"
    return isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef)


def imports(name, tree):
    """Yield (dotted absolute name, node, whether lazy: in a function, or for types only) of all that a module imports.

    `from a import b` yields a.b, which is right for a module b and harmless for anything else.
    """
    inside = {child for node in ast.walk(tree) if postpones(node) for child in ast.walk(node)}
    here = ["homog", *name.split(".")[:-1]]  # the package that a relative import starts from
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node, node in inside
        elif isinstance(node, ast.ImportFrom):
            start = here[: len(here) - node.level + 1] if node.level else []
            base = ".".join([*start, *([node.module] if node.module else [])])
            for alias in node.names:
                yield f"{base}.{alias.name}", node, node in inside


def target(dotted):
    """Return the module of this package that an absolute import reaches, or None for anybody else's."""
    top, *rest = dotted.split(".")
    if top != "homog":
        return None
    return rest[0] if rest and rest[0] in ORDER else "__init__" if len(rest) < 2 else rest[0]


def prints(node):
    """Say whether a node writes to the terminal or ends the program."""
    if isinstance(node, ast.Name):
        return node.id in {"print", "input", "exit", "quit", "SystemExit"}
    if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "sys":
        return node.attr in {"exit", "stdout", "stderr"}
    return False


def faults(name, source, allowed=ALLOWED):
    """Return one line for each way in which a module breaks the rules of the house."""
    tree, me, found = ast.parse(source), unit(name), []

    def fault(node, text):
        found.append(f"homog/{name.replace('.', '/')}.py:{getattr(node, 'lineno', 1)}: {text}")

    if me not in ORDER:
        fault(tree, f"'{me}' has no place in the order; give it one here")
        return found
    for dotted, node, lazy in imports(name, tree):
        top = dotted.split(".")[0]
        other = target(dotted)
        if top == "matplotlib" and (me not in MAY_DRAW or not lazy):
            fault(node, "imports matplotlib; only plots does, inside the function that draws")
        if (top in PRINTING or dotted in {"sys.exit", "sys.stdout", "sys.stderr"}) and me not in MAY_PRINT:
            fault(node, f"imports {dotted}; only the command line prints and exits")
        if other is None or other == me:
            continue
        if other not in ORDER:
            fault(node, f"imports '{other}', which has no place in the order; give it one here")
        elif (me, other) in allowed:
            if not lazy:
                fault(node, f"imports {other} at the head; the exception is for inside a function")
        elif me == "__init__" and lazy:
            continue  # the front door may reach anything, when it is asked for
        elif me in ONLY and other not in ONLY[me]:
            fault(node, f"imports {other}; {me} is arrays only and imports {', '.join(sorted(ONLY[me]))}")
        elif other in NEVER.get(me, ()):
            fault(node, f"imports {other}; {me} must not know it")
        elif ORDER.index(other) > ORDER.index(me):
            fault(node, f"imports {other}, which stands after it")
    if me not in MAY_PRINT:
        for node in ast.walk(tree):
            if prints(node):
                fault(node, "prints or exits; only the command line does")
    if len(source.splitlines()) > MOST_LINES:
        fault(tree, f"has {len(source.splitlines())} lines; {MOST_LINES} at most can be read in one sitting")
    return found


@pytest.mark.parametrize("name", modules())
def test_a_module_keeps_the_rules(name):
    assert faults(name, modules()[name]) == []


def test_the_modules_are_found():
    found = modules()
    assert {"errors", "tensors", "materials"} <= set(found)
    assert len(found) == len(list(PACKAGE.rglob("*.py")))


@pytest.mark.parametrize(("importer", "imported"), ALLOWED)
def test_an_exception_is_still_needed(importer, imported):
    source = {name: text for name, text in modules().items() if unit(name) == importer}
    reached = {target(d) for name, text in source.items() for d, _, _ in imports(name, ast.parse(text))}
    assert imported in reached, "the exception is no longer used; take it off the list"


@pytest.mark.parametrize(
    ("name", "source", "complaint"),
    [
        ("tensors", "from homog.cell import UnitCell", "imports cell, which stands after it"),
        ("tensors", "from homog import cell", "imports cell, which stands after it"),
        ("tensors", "import homog.cell as c", "imports cell, which stands after it"),
        ("tensors", "from .cell import UnitCell", "imports cell, which stands after it"),
        ("tensors", "from . import cell", "imports cell, which stands after it"),
        ("tensors", "import homog", "imports __init__, which stands after it"),
        ("tensors", "from homog import homogenize", "imports __init__, which stands after it"),
        ("tensors", "def f():\n    from homog.cell import UnitCell", "imports cell, which stands after it"),
        ("tensors", "if TYPE_CHECKING:\n    from homog.cell import UnitCell", "imports cell, which stands after it"),
        ("families.planar", "from homog.effective import Effective", "imports effective, which stands after it"),
        ("families.planar", "from ..assembly import assemble", "imports assembly; families must not know it"),
        ("families.planar", "from homog.elements import ELEMENTS", "imports elements; families must not know it"),
        ("families.__init__", "from homog import elements", "imports elements; families must not know it"),
        ("assembly", "from homog.families import build", "imports families; assembly must not know it"),
        ("cell", "from homog.elements import ELEMENTS", "imports elements, which stands after it"),
        ("bounds", "from homog.cell import UnitCell", "imports cell; bounds is arrays only"),
        ("directional", "from homog.materials import Material", "imports materials; directional is arrays only"),
        ("screening", "from homog.cli import entry", "imports cli, which stands after it"),
        ("__init__", "from homog.cli import entry", "imports cli, which stands after it"),
        ("effective", "from homog.columns import COLUMNS", "the exception is for inside a function"),
        ("effective", "def f():\n    from homog.report import write", "imports report, which stands after it"),
        ("helpers", "", "'helpers' has no place in the order"),
        ("cell", "from homog.helpers import shift", "imports 'helpers', which has no place in the order"),
        ("report", "def f():\n    import matplotlib.pyplot", "imports matplotlib; only plots does"),
        ("plots", "import matplotlib", "imports matplotlib; only plots does, inside the function"),
        ("screening", "from rich.progress import Progress", "imports rich.progress.Progress; only the command line"),
        ("screening", "def f():\n    print(1)", "prints or exits"),
        ("screening", "import sys\nsys.exit(1)", "prints or exits"),
        ("screening", "from sys import exit", "imports sys.exit; only the command line"),
        ("screening", "import sys\nsys.stderr.write('x')", "prints or exits"),
        ("screening", "raise SystemExit(2)", "prints or exits"),
        ("tensors", "x = 1\n" * (MOST_LINES + 1), f"has {MOST_LINES + 1} lines"),
    ],
)
def test_a_bad_module_is_caught(name, source, complaint):
    found = faults(name, source)
    assert len(found) == 1 and complaint in found[0], found
    assert found[0].startswith(f"homog/{name.replace('.', '/')}.py:")


@pytest.mark.parametrize(
    ("name", "source"),
    [
        ("screening", "import numpy as np\nfrom homog.brief import Brief\nfrom homog import columns, errors"),
        ("families.planar", "from homog.families.registry import family\nfrom .registry import f\nfrom . import x"),
        ("families.planar", "from ..tensors import rotation"),
        ("effective", "def f():\n    from homog.columns import COLUMNS"),
        ("plots", "def f():\n    from matplotlib.figure import Figure"),
        ("plots", "if TYPE_CHECKING:\n    from matplotlib.figure import Figure"),
        ("cli", "import sys, typer\nimport homog\nfrom homog import report\nprint(1)\nsys.exit(0)"),
        ("__init__", "def __getattr__(name):\n    from homog import report"),
        ("tensors", '"""\n>>> print(1)\n"""\n' + "x = 1\n" * (MOST_LINES - 3)),
    ],
)
def test_a_good_module_passes(name, source):
    assert faults(name, source) == []
