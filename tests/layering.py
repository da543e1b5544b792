"""Check that imports inside mixbridge run in one direction: ``python tests/layering.py [package directory]``.

A file may import files of an earlier layer of `LAYERS` and files of its own layer, never a later layer; no
chain of imports leads back to where it began; only ``mixbridge/__init__.py`` sees everything and nobody
imports it. Imports inside functions and under ``TYPE_CHECKING`` count. The exit status is 1 when something is
wrong.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

LAYERS = (
    "errors",
    "display",
    "sources",
    "panel",
    "moments",
    "ratio",
    "routes",
    "inference",
    "correlated",
    "resample",
    "audit",
    "reconcile",
    "rehearse",
    "report",
    "demo",
    "study",
    "cli",
    "__main__",
)


def problems(package: Path) -> list[str]:
    """Return one sentence per broken rule, none if all is well."""
    files = {_module(package, file): file for file in sorted(package.rglob("*.py"))}
    found = [
        f"{name}: the layer {_layer(name)!r} is not listed; put it where it belongs in {Path(__file__).name}"
        for name in files
        if name and _layer(name) not in LAYERS
    ]
    edges: dict[str, set[str]] = {}
    for name, file in files.items():
        targets = edges[name] = {target for _, target in _imports(package.name, name, file, files)}
        if not name:  # the package's own __init__ hands names on and sees everything
            continue
        for line, target in sorted(_imports(package.name, name, file, files)):
            where = f"{file.relative_to(package.parent)}:{line}"
            if not target:
                found.append(f"{where}: imports the package itself; import the file that defines the name")
            elif {_layer(name), _layer(target)} <= set(LAYERS) and _rank(target) > _rank(name):
                found.append(f"{where}: {_layer(name)} imports the later layer {_layer(target)}")
        targets.discard("")
    edges.pop("", None)
    return found + [f"circle of imports: {' -> '.join(circle)}" for circle in _circles(edges)]


def _module(package: Path, file: Path) -> str:
    parts = file.relative_to(package).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def _layer(name: str) -> str:
    return name.partition(".")[0]


def _rank(name: str) -> int:
    return LAYERS.index(_layer(name))


def _imports(package: str, name: str, file: Path, files: dict[str, Path]) -> Iterator[tuple[int, str]]:
    """Yield the line and the name, within the package, of each file that is imported."""
    here = [package, *(name.split(".") if name else [])]
    parent = here if file.name == "__init__.py" else here[:-1]
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            candidates = [(alias.name.split("."), None) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = parent[: len(parent) - node.level + 1] if node.level else []
            base = base + (node.module.split(".") if node.module else [])
            candidates = [(base, alias.name) for alias in node.names]
        else:
            continue
        for path, member in candidates:
            if path[:1] != [package]:
                continue
            inside = ".".join(path[1:])
            deeper = ".".join([*path[1:], member]) if member else inside
            target = deeper if deeper in files else inside
            if target != name:
                yield node.lineno, target


def _circles(edges: dict[str, set[str]]) -> list[list[str]]:
    """Return each circle once, found by a depth-first walk."""
    found: list[list[str]] = []
    done: set[str] = set()

    def walk(name: str, trail: list[str]) -> None:
        if name in trail:
            found.append([*trail[trail.index(name) :], name])
        elif name not in done:
            for target in sorted(edges.get(name, ())):
                walk(target, [*trail, name])
            done.add(name)

    for name in sorted(edges):
        walk(name, [])
    return found


def main(arguments: list[str]) -> int:
    """Print the problems and return the exit status."""
    package = Path(arguments[0]) if arguments else Path(__file__).parents[1] / "mixbridge"
    found = problems(package)
    print("\n".join(found) if found else f"layering of {package.name}: in order")
    return 1 if found else 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
