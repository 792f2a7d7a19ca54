"""The house itself: which way imports point, what is public, how it is documented."""

import ast
import importlib
import inspect
import re
import subprocess
import sys
from pathlib import Path

import jaxtyping
import pytest

import oscillib


ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "oscillib"
# The table of rooms in the contributor's guide is the order; a room need not exist yet.
ORDER = re.findall(r"^\| `(\w+)` \|", (ROOT / "DEVELOPERS.md").read_text(), re.MULTILINE)
ROOMS = sorted(p.parent.name for p in PACKAGE.glob("*/__init__.py"))
FILES = sorted(PACKAGE.rglob("*.py"))
TRACKED = [
    ROOT / name
    for name in subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout.splitlines()
]


def relative(path):
    return str(path.relative_to(ROOT))


def public():
    """Every public name of every room, as the first `X as X` of its `__init__.py` gives it."""
    for room in ROOMS:
        module = importlib.import_module(f"oscillib.{room}")
        for node in ast.parse((PACKAGE / room / "__init__.py").read_text()).body:
            if isinstance(node, ast.ImportFrom):
                for alias in node.names:
                    yield f"{room}.{alias.name}", getattr(module, alias.name)


PUBLIC = dict(public())


def imported_rooms(path):
    """Rooms that a file imports, wherever in it, with the line."""
    inside = path.relative_to(PACKAGE).parts[:-1]
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            targets = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = list(inside[: len(inside) - node.level + 1]) if node.level else []
            absolute = ["oscillib", *base] if node.level else []
            stem = ".".join([*absolute, *([node.module] if node.module else [])])
            targets = [stem, *(f"{stem}.{alias.name}" for alias in node.names)]
        else:
            continue
        for target in targets:
            parts = target.split(".")
            if parts[0] == "oscillib" and len(parts) > 1 and parts[1] in ROOMS:
                yield parts[1], node.lineno


def test_every_room_has_its_place():
    assert len(ROOMS) >= 5
    assert set(ROOMS) <= set(ORDER)
    assert len(set(ORDER)) == len(ORDER)


def test_every_room_is_an_attribute_of_the_package():
    import oscillib

    listed = {name for name in dir(oscillib) if not name.startswith("_")}
    assert sorted(listed - {"jaxtyping"}) == ROOMS  # what the hook of the tests leaves there
    assert all(getattr(oscillib, room).__name__ == f"oscillib.{room}" for room in ROOMS)
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        oscillib.nonsense  # noqa: B018


@pytest.mark.parametrize("path", FILES, ids=relative)
def test_imports_only_point_up(path):
    own = path.relative_to(PACKAGE).parts[0]
    for room, line in imported_rooms(path):
        if own in ("__init__.py", "_pytest.py"):  # the doors: of the package, and for pytest
            continue
        where = f"{relative(path)}:{line} imports {room}"
        assert own in ROOMS, f"{where}: a file every room shares imports no room"
        assert ORDER.index(room) <= ORDER.index(own), where


@pytest.mark.parametrize("room", ROOMS)
def test_room_holds_private_files_and_exports_them_by_name(room):
    files = [p.name for p in (PACKAGE / room).iterdir() if p.suffix == ".py"]
    assert len(files) > 1, "a room appears only when it holds something"
    assert all(name.startswith("_") for name in files)
    docstring, *imports = ast.parse((PACKAGE / room / "__init__.py").read_text()).body
    assert isinstance(docstring, ast.Expr)
    for node in imports:
        assert isinstance(node, ast.ImportFrom), f"line {node.lineno}: only imports from files"
        assert node.level == 1, f"line {node.lineno}: only from files of the room"
        for alias in node.names:
            assert alias.asname == alias.name, f"`{alias.name} as {alias.name}` marks it public"
            assert not alias.name.startswith("_")


@pytest.mark.parametrize("path", FILES, ids=relative)
def test_files_are_short_full_and_use_public_api(path):
    text = path.read_text()
    assert text.strip(), "no empty file"
    assert len(text.splitlines()) < 400
    assert "jax._src" not in text
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef):
            assert lines_of(node) < 80, f"{node.name} at line {node.lineno}"


def lines_of(function):
    """Lines from the `def` to the end, without the docstring."""
    length = function.end_lineno - function.lineno + 1
    first = function.body[0]
    if ast.get_docstring(function) is not None:
        length -= first.end_lineno - first.lineno + 1
    return length


@pytest.mark.parametrize("name", PUBLIC)
def test_public_name_is_documented(name):
    thing = PUBLIC[name]
    if not inspect.isclass(thing) and not inspect.isfunction(thing):
        return  # a constant or the name of a type: its comment stands beside it
    doc = inspect.getdoc(thing)
    assert doc, "no docstring"
    summary = doc.splitlines()[0]
    assert summary.endswith("."), "the first line is one sentence"
    if inspect.isclass(thing):
        return
    signature = inspect.signature(thing)
    sections = re.findall(r"^(Arguments|Returns|Raises|Example|Source):", doc, re.MULTILINE)
    order = [s for s in ("Arguments", "Returns", "Raises", "Example", "Source") if s in sections]
    assert sections == order, "sections once each, in the order of the contributor's guide"
    assert ">>>" in doc.partition("\nExample:")[2], "an example that runs"
    if signature.parameters:
        arguments = doc.partition("\nArguments:")[2].partition("\nReturns:")[0]
        for parameter in signature.parameters:
            described = re.search(
                rf"^ +[\w`, *]*\b{parameter}\b[\w`, *]*:", arguments, re.MULTILINE
            )
            assert described, f"argument {parameter} is not described"
    if signature.return_annotation not in (None, "None"):
        assert "Returns" in sections


def test_import_of_all_rooms_draws_in_no_plots_and_no_signal_processing():
    rooms = ", ".join(f"oscillib.{room}" for room in ROOMS if room != "plots")
    script = (
        f"import sys, {rooms};"
        "heavy = {'matplotlib', 'tqdm', 'scipy.signal', 'pandas', 'optax'} & set(sys.modules);"
        "sys.exit(', '.join(sorted(heavy)) or None)"
    )
    out = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert out.returncode == 0, out.stderr


def test_rooms_are_imported_when_used():
    script = (
        "import sys, oscillib;"
        "early = [m for m in sys.modules if m.startswith('oscillib.') or m == 'jax'];"
        "assert not early, early;"
        "assert set(dir(oscillib)) >= {ROOMS}, dir(oscillib);"
        "assert oscillib.fields is sys.modules['oscillib.fields'];"
        "assert 'oscillib.fitting' not in sys.modules;"
        "assert not hasattr(oscillib, 'feilds')"
    ).replace("{ROOMS}", repr(set(ROOMS)))
    out = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert out.returncode == 0, out.stderr


def test_rooms_that_are_listed_exist():
    tree = ast.parse((PACKAGE / "__init__.py").read_text())
    lists = [
        n.value for n in ast.walk(tree) if isinstance(n, ast.Assign) and "_ROOMS" in ast.dump(n)
    ]
    assert ast.literal_eval(lists[0]) == tuple(ROOMS)
    (block,) = [n for n in ast.walk(tree) if isinstance(n, ast.ImportFrom) and n.level == 1]
    assert [alias.name for alias in block.names] == ROOMS  # what a type checker sees


def test_annotations_are_checked_in_the_tests():
    # The hook must come before the first import of the package, which our plugin could spoil.
    with pytest.raises(jaxtyping.TypeCheckError):
        oscillib.fields.order_parameter("no array")  # pyright: ignore[reportArgumentType]


def test_top_level_holds_what_the_guide_says():
    visible = {path.relative_to(ROOT).parts[0] for path in TRACKED}
    expected = {"README.md", "DEVELOPERS.md", "pyproject.toml"}
    expected |= {"oscillib", "tests", "examples", "benchmarks"}
    assert {name for name in visible if not name.startswith(".")} == expected


def test_no_tracked_file_is_empty():
    allowed = {"py.typed"}
    empty = [relative(p) for p in TRACKED if p.exists() and p.stat().st_size == 0]
    assert not [name for name in empty if Path(name).name not in allowed]
