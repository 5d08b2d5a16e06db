"""The rooms: imports point one way, public names are exactly those announced."""

import ast
import pathlib

import chanbank

ROOT = pathlib.Path(chanbank.__file__).parent

# From the face down to the parameter rules; a module may import from its own room and from below.
ROOMS = [
    "face",
    "splitting",
    "plots",
    "search",
    "fixedpoint",
    "metrics",
    "synthesis",
    "analysis",
    "_engine",
    "prototype",
    "plan",
    "recordings",
    "_blas",
    "_files",
    "_checks",
]


def room_of(parts):
    """The room of a module given as the parts of its dotted name after the package."""
    if not parts or parts[0] in ("__init__", "__main__", "_shell", "_describe", "_rebuild"):
        return "face"
    return parts[0]


def package_imports(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: imports are absolute"
            if node.module and node.module.split(".")[0] == "chanbank":
                parts = node.module.split(".")[1:]
                yield parts or [node.names[0].name]
        elif isinstance(node, ast.Import):
            for name in node.names:
                if name.name.split(".")[0] == "chanbank":
                    yield name.name.split(".")[1:]


def modules():
    return sorted(ROOT.rglob("*.py"))


def test_every_module_lives_in_a_room():
    for path in modules():
        assert room_of(path.relative_to(ROOT).with_suffix("").parts) in ROOMS, path


def test_imports_point_down():
    for path in modules():
        here = room_of(path.relative_to(ROOT).with_suffix("").parts)
        for parts in package_imports(path):
            there = room_of(parts)
            assert ROOMS.index(there) >= ROOMS.index(here), f"{path} imports {'.'.join(parts)}"


def test_public_names_are_announced_and_nothing_else_is():
    tree = ast.parse((ROOT / "__init__.py").read_text(encoding="utf-8"))
    imported = {
        alias.asname or alias.name
        for node in tree.body
        if isinstance(node, ast.ImportFrom)
        for alias in node.names
    }
    assert imported == set(chanbank.__all__)
    assert sorted(chanbank.__all__, key=str.casefold) == sorted(
        set(chanbank.__all__), key=str.casefold
    )
    for name in chanbank.__all__:
        assert hasattr(chanbank, name)


def test_each_module_announces_its_own_names():
    for path in modules():
        if path.name in ("__init__.py", "__main__.py"):
            continue
        tree = ast.parse(path.read_text(encoding="utf-8"))
        lists = [
            node
            for node in tree.body
            if isinstance(node, ast.Assign) and getattr(node.targets[0], "id", "") == "__all__"
        ]
        assert len(lists) == 1, f"{path} has no literal __all__"
        announced = set(ast.literal_eval(lists[0].value))
        defined = {
            node.name for node in tree.body if isinstance(node, (ast.FunctionDef, ast.ClassDef))
        } | {
            target.id
            for node in tree.body
            if isinstance(node, ast.Assign)
            for target in node.targets
            if isinstance(target, ast.Name)
        }
        assert announced <= defined, f"{path} announces {announced - defined}"


def test_optional_packages_are_not_needed_to_import():
    for path in modules():
        if room_of(path.relative_to(ROOT).with_suffix("").parts) in ("plots", "_engine"):
            continue
        tree = ast.parse(path.read_text(encoding="utf-8"))
        for node in tree.body:
            names = []
            if isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom):
                names = [node.module or ""]
            for name in names:
                assert name.split(".")[0] not in ("matplotlib", "numba"), path
