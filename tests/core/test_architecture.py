"""The rooms and which way imports point, read with ast; the size of the thin shells."""

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / "layerscan"
BASE = {
    "records", "settings", "documents", "document_files", "document_models", "layer_tables", "errors", "uncertainty",
    "geometry", "_version", "verification",
}  # fmt: skip
LEVEL = {
    **dict.fromkeys(BASE, 0),
    **dict.fromkeys(("readers", "measurement", "optics", "figures"), 1),
    "comparison": 2,
    "workflow": 3,
    "report": 4,
    "demo": 5,
    "study": 5,
    "cli": 6,
    "commands": 6,
}
SIBLINGS = {"readers", "measurement", "optics", "figures"}
LAZY = {"workflow": {"demo"}}  # run_demo calls the chain that ends in a page
ONLY_IN_PLUGIN = {"napari", "qtpy", "PySide6", "PyQt6", "PyQt5", "pyqtgraph", "magicgui"}
GPL_ONLY_IN = {"rsciio": {"readers/instruments.py"}}


def modules():
    for path in sorted(PACKAGE.rglob("*.py")):
        if "sample_images" not in path.parts:
            yield path


def room_of(path):
    parts = path.relative_to(PACKAGE).parts
    return parts[0].removesuffix(".py")


def imports(path):
    """Yield (module, names) of every import in a file, wherever it stands."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, ()
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            yield node.module, tuple(a.name for a in node.names)


def arrows():
    for path in modules():
        room = room_of(path)
        if room == "__init__":
            continue
        for module, names in imports(path):
            if module == "layerscan":
                for name in names:
                    yield path, room, name
            elif module.startswith("layerscan."):
                yield path, room, module.split(".")[1]


def test_every_room_is_on_the_map():
    rooms = {room_of(p) for p in modules()} - {"__init__"}
    assert rooms <= set(LEVEL), f"rooms without a place on the map: {sorted(rooms - set(LEVEL))}"


def test_imports_point_one_way():
    wrong = []
    for path, room, target in arrows():
        if target == room or target in LAZY.get(room, set()):
            continue
        upward = LEVEL[target] > LEVEL[room]
        across = room in SIBLINGS and target in SIBLINGS
        if upward or across:
            wrong.append(f"{path.relative_to(ROOT)} imports {target}")
    assert not wrong, "\n".join(wrong)


def test_report_never_reads_the_ledger():
    reading = [str(p) for p, room, target in arrows() if room == "report" and target == "study"]
    assert not reading


def test_nothing_is_imported_from_a_room_itself():
    # a cycle needs an __init__ that imports: every name comes from the module that owns it
    rooms = {p.name for p in PACKAGE.iterdir() if p.is_dir()}
    wrong = []
    for path in modules():
        for module, names in imports(path):
            if module == "layerscan" and path.name != "__init__.py":
                wrong += [f"{path}: {n}" for n in names if not (PACKAGE / f"{n}.py").exists()]
            elif module.startswith("layerscan.") and module.split(".")[-1] in rooms and module.count(".") == 1:
                room = PACKAGE / module.split(".")[1]
                wrong += [f"{path}: {n}" for n in names if not (room / f"{n}.py").exists()]
    assert not wrong, "\n".join(wrong)


def test_windows_belong_to_the_plugin_and_gpl_to_the_extra():
    wrong = []
    for path in modules():
        for module, _ in imports(path):
            top = module.split(".")[0]
            if top in ONLY_IN_PLUGIN:
                wrong.append(f"{path.name} imports {top}")
            if top in GPL_ONLY_IN and path.relative_to(PACKAGE).as_posix() not in GPL_ONLY_IN[top]:
                wrong.append(f"{path.name} imports {top}")
    assert not wrong, "\n".join(wrong)


def test_workflow_stays_thin():
    text = (PACKAGE / "workflow.py").read_text(encoding="utf-8")
    assert len(text.splitlines()) < 250
    operators = [n for n in ast.walk(ast.parse(text)) if isinstance(n, ast.BinOp) and not isinstance(n.op, ast.BitOr)]
    assert not operators, "no arithmetic in workflow.py"


@pytest.mark.parametrize("path", list(modules()), ids=lambda p: p.relative_to(PACKAGE).as_posix())
def test_no_module_swallows_all(path):
    assert len(path.read_text(encoding="utf-8").splitlines()) <= 620


def test_every_flag_in_use_is_defined_once():
    from layerscan.records import FLAGS

    # a flag is a quoted lower-case word with an underscore that stands in a tuple, list or append of flags
    used = {}
    pattern = re.compile(r"flags?\w*\.(?:append|add|extend)\(\s*\"([a-z_]+)\"|flags=\(\"([a-z_]+)\"")
    for path in modules():
        for match in pattern.finditer(path.read_text(encoding="utf-8")):
            used[match.group(1) or match.group(2)] = path.name
    assert len(used) > 3
    unknown = {flag: where for flag, where in used.items() if flag not in FLAGS}
    assert not unknown


def test_version_is_stated_once():
    import tomllib

    from layerscan._version import __version__

    assert tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]["version"] == __version__
