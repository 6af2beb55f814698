"""The layers, checked on the source text: a layer one must remember is not a layer."""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

TOP = Path(__file__).resolve().parent.parent
LONGEST_MODULE = 400
BASIC = ("platewatch.types", "platewatch.errors", "platewatch.units")
CORE = (*BASIC, "platewatch.thermal", "platewatch.monitor")
RUNNING = (
    *BASIC,
    "platewatch",
    "platewatch.compose",
    "platewatch.compose_monitor",
    "platewatch.compose_plate",
    "platewatch.compose_study",
    "platewatch.clock",
    "platewatch.session",
    "platewatch.arrival",
    "platewatch.daemon",
    "platewatch.daemon_plate",
    "platewatch.daemon_words",
    "platewatch.replay",
    "platewatch.demo",
)

# Which part may import what besides the standard library: our own modules (with what
# lies below them) and the libraries of others.
ALLOWED: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "types": ((), ("numpy",)),
    "errors": ((), ()),
    "units": ((), ()),
    "clock": ((), ()),
    "thermal": ((*BASIC, "platewatch.thermal"), ("numpy", "scipy", "shapely")),
    "monitor": (CORE, ("numpy", "scipy", "shapely")),
    "session": (("platewatch.types", "platewatch.monitor"), ()),
    "arrival": (("platewatch.types", "platewatch.clock"), ()),
    "studies": ((*CORE, "platewatch.studies"), ("numpy", "scipy", "shapely")),
    "compose": (("platewatch",), ("numpy",)),
    "daemon": (RUNNING, ()),
    "replay": (RUNNING, ()),
    "demo": (RUNNING, ()),
    "cli": ((*RUNNING, "platewatch.cli"), ("rich",)),
    "__main__": (("platewatch.cli",), ()),
    "__init__": ((), ()),
}
ADAPTER_LIBRARIES: dict[str, tuple[str, ...]] = {
    "bus": ("paho",),
    "broker": ("iotcore",),
    "storage": ("sqlalchemy", "psycopg", "alembic"),
    "settings": ("pydantic", "pydantic_core", "shapely"),
    "messages": ("msgspec",),
    "logs": ("pandas", "pyarrow"),
    "tables_out": ("pyarrow",),
    "papers": (),
    "screen": ("starlette", "uvicorn", "argon2"),
}
# The parser of descriptions makes the dataclasses of the core, so it may know them.
KNOWS_THE_CORE = ("settings",)
SIMULATOR = (
    (
        *BASIC,
        "platewatch.thermal.plate",
        "platewatch.adapters.settings",
        "platewatch.adapters.messages",
        "platewatch.adapters.bus",
        "platewatch.adapters.logs",
        "sim_sensors",
    ),
    ("numpy", "scipy", "paho"),
)


def modules(folder: str) -> list[Path]:
    return sorted((TOP / folder).rglob("*.py"))


ALL = [*modules("platewatch"), *modules("sim_sensors")]
IDS = [str(path.relative_to(TOP)) for path in ALL]


def name_of(path: Path) -> str:
    parts = path.relative_to(TOP).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imported(path: Path) -> Iterator[str]:
    """Every module that a file imports, wherever in it, as an absolute name."""
    package = name_of(path).split(".")
    if path.name != "__init__.py":
        package = package[:-1]
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else []
            module = ".".join([*base, *([node.module] if node.module else [])])
            for alias in node.names:
                # `from platewatch import compose` names a module, not a value of one.
                inner = TOP.joinpath(*module.split("."), f"{alias.name}.py")
                yield f"{module}.{alias.name}" if inner.is_file() else module


def below(name: str, allowed: tuple[str, ...]) -> bool:
    return any(
        name == prefix or name.startswith((f"{prefix}.", f"{prefix}_")) for prefix in allowed
    )


def adapter_of(stem: str) -> str:
    """settings_rules.py and its like belong to the adapter whose name they begin with."""
    return next(
        (name for name in ADAPTER_LIBRARIES if stem == name or stem.startswith(f"{name}_")), stem
    )


def rule_for(path: Path) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Own modules and libraries that one file may import."""
    parts = path.relative_to(TOP).parts
    if parts[0] == "sim_sensors":
        return SIMULATOR
    if parts[1] == "adapters":
        adapter = adapter_of(path.stem if len(parts) == 3 else parts[2])
        own = (*BASIC, "platewatch.clock", f"platewatch.adapters.{adapter}", "platewatch.adapters")
        core = CORE if adapter in KNOWS_THE_CORE else ()
        if path.name == "__init__.py" and len(parts) == 3:
            return (), ()
        assert adapter in ADAPTER_LIBRARIES, f"{path.name} belongs to no adapter named in the table"
        return (*own[:-1], *core), ("numpy", *ADAPTER_LIBRARIES[adapter])
    part = parts[1] if len(parts) > 2 else path.stem.split("_")[0] or path.stem
    return ALLOWED[part]


@pytest.mark.parametrize("path", ALL, ids=IDS)
def test_a_module_imports_only_what_its_layer_may(path: Path) -> None:
    """Style, section 1: the core knows no adapter, adapters do not know each other."""
    own, libraries = rule_for(path)
    wrong = [
        name
        for name in imported(path)
        if name.split(".")[0] not in sys.stdlib_module_names
        and not (below(name, own) if name.startswith(("platewatch", "sim_sensors")) else False)
        and name.split(".")[0] not in libraries
    ]
    assert not wrong, f"{path.relative_to(TOP)} imports {', '.join(wrong)}"


@pytest.mark.parametrize("path", ALL, ids=IDS)
def test_a_module_is_short_enough_to_be_read(path: Path) -> None:
    """Style, section 2: 60 to 300 lines, look again at 400."""
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST_MODULE


@pytest.mark.parametrize("path", ALL, ids=IDS)
def test_importing_a_module_does_nothing(path: Path) -> None:
    """No connection, no file read, no print at import: only definitions and constants."""
    if path.name == "__main__.py":
        pytest.skip("is made to act, and nothing imports it")
    loose = []
    for node in ast.parse(path.read_text(encoding="utf-8")).body:
        if isinstance(node, ast.For | ast.While | ast.With | ast.Delete):
            loose.append(f"line {node.lineno}")
        if isinstance(node, ast.Expr) and not _declares(node.value):
            loose.append(f"line {node.lineno}")
        if isinstance(node, ast.If) and not _is_guard(node.test):
            loose.append(f"line {node.lineno}")
        if isinstance(node, ast.Assign | ast.AnnAssign) and _opens(node):
            loose.append(f"line {node.lineno}")
    assert not loose, f"{path.relative_to(TOP)} acts when imported: {', '.join(loose)}"


def _declares(value: ast.expr) -> bool:
    """A docstring, or an index that a table declares beside itself."""
    is_index = isinstance(value, ast.Call) and ast.unparse(value.func) == "Index"
    return isinstance(value, ast.Constant) or is_index


def _is_guard(test: ast.expr) -> bool:
    return ast.unparse(test) in ("TYPE_CHECKING", "__name__ == '__main__'")


def _opens(node: ast.Assign | ast.AnnAssign) -> bool:
    """Does an assignment touch the world outside?"""
    calls = [n for n in ast.walk(node) if isinstance(n, ast.Call)]
    names = {ast.unparse(call.func).split(".")[-1] for call in calls}
    return bool(names & {"open", "connect", "read_text", "read_bytes", "getLogger", "getenv"})


@pytest.mark.parametrize("path", ALL, ids=IDS)
def test_a_module_says_in_its_first_line_what_it_is_for(path: Path) -> None:
    """A reader who knows nothing of the code sees what each module does."""
    assert ast.get_docstring(ast.parse(path.read_text(encoding="utf-8")))


def test_no_module_has_a_name_that_says_nothing() -> None:
    """Style, section 3: no utils, helper, manager."""
    empty = {"utils", "util", "helper", "helpers", "manager", "common", "misc"}
    assert not [path for path in ALL if set(path.stem.split("_")) & empty]


def test_the_package_offers_few_names() -> None:
    """Style, section 2: at most eight public names at the top."""
    tree = ast.parse((TOP / "platewatch/__init__.py").read_text(encoding="utf-8"))
    names = [
        target.id
        for node in tree.body
        if isinstance(node, ast.Assign)
        for target in node.targets
        if isinstance(target, ast.Name)
    ]
    assert len(names) <= 8
