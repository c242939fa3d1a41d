"""The way through the house: imports go in one direction, inside functions too; the public face is pinned."""

import ast
from pathlib import Path

import withstand

ORDER = [
    "errors", "registry", "tails", "study", "departures", "procedures", "diagnostics", "exact", "engine", "measures",
    "judgement", "lab", "report", "scenario", "front", "cli",
]  # fmt: skip
ROOT = Path(withstand.__file__).parent


def imports(path: Path) -> list[str]:
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path} uses a relative import"
            found += [f"{node.module}.{alias.name}" for alias in node.names]
    return [name for name in found if name.split(".")[0] == "withstand"]


def room(path: Path) -> str:
    return path.relative_to(ROOT).parts[0].removesuffix(".py")


def module_files() -> list[Path]:
    return sorted(path for path in ROOT.rglob("*.py") if room(path) in ORDER)


def test_every_room_is_named():
    rooms = {
        room(path) for path in ROOT.rglob("*.py") if path.name not in {"__init__.py", "__main__.py"} or path.parent != ROOT
    }
    assert rooms - {"__init__", "__main__"} <= set(ORDER)


def test_imports_point_backwards_only():
    wrong = [
        f"{path.relative_to(ROOT)} imports {name}"
        for path in module_files()
        for name in imports(path)
        if len(name.split(".")) > 1
        and name.split(".")[1] in ORDER
        and ORDER.index(name.split(".")[1]) > ORDER.index(room(path))
    ]
    assert wrong == []


def test_no_module_cycles():
    files = {
        ".".join(("withstand", *path.relative_to(ROOT).with_suffix("").parts)).removesuffix(".__init__"): path
        for path in module_files()
    }
    graph = {}
    for name, path in files.items():
        targets = set()
        for imported in imports(path):
            while imported not in files and "." in imported:
                imported = imported.rpartition(".")[0]
            if imported in files and imported != name:
                targets.add(imported)
        graph[name] = targets
    done: set[str] = set()

    def visit(name: str, trail: tuple[str, ...]) -> None:
        assert name not in trail, " -> ".join((*trail, name))
        if name not in done:
            for target in sorted(graph[name]):
                visit(target, (*trail, name))
            done.add(name)

    for name in graph:
        visit(name, ())


def test_public_face():
    assert withstand.__all__ == sorted(withstand.__all__)
    for name in withstand.__all__:
        assert hasattr(withstand, name)
