"""A YAML file as plain data, with the line and column of every key and value."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from geofractal.errors import ConfigError, Problem

MAX_BYTES = 1_000_000
MAX_NODES = 100_000

KeyPath = tuple[str | int, ...]
Position = tuple[int, int]

_CORE = "tag:yaml.org,2002:"
_TOP = "a mapping with keys such as layers: and measures:"


@dataclass(frozen=True)
class YamlTree:
    """What a YAML file holds and where: dicts with text keys, lists, texts, numbers, booleans, None.

    Attributes
    ----------
    path : the file as it was named
    data : its content
    keys : position of each mapping key, by path of keys
    values : position of each value, by path of keys; the whole file is ``()``
    """

    path: Path
    data: Any
    keys: Mapping[KeyPath, Position] = field(default_factory=dict)
    values: Mapping[KeyPath, Position] = field(default_factory=dict)

    def problem(
        self, at: KeyPath, said: str, *, allowed: str = "", near: str = "", on_key: bool = False
    ) -> Problem:
        """Return a problem at a path of keys, or at the nearest part of it that the file holds."""
        places = self.keys if on_key else self.values
        held = next((at[:n] for n in range(len(at), 0, -1) if at[:n] in places), ())
        line, column = places.get(held, self.values.get(held, (0, 0)))
        return Problem(str(self.path), line, column, key_text(at), said, allowed, near)

    def at(self, path: KeyPath) -> Any:
        """Return the value at a path of keys; the path must be in `values`."""
        found = self.data
        for step in path:
            found = found[step]
        return found


def key_text(path: KeyPath) -> str:
    """Return a path of keys as text: ``measures[0].lengths-at-m``."""
    steps = (f"[{step}]" if isinstance(step, int) else f".{step}" for step in path)
    return "".join(steps).removeprefix(".")


def config_error(path: Path, problems: Iterable[Problem]) -> ConfigError:
    """Return one error that shows every problem, in the order of the file's lines."""
    unique = tuple(sorted(set(problems), key=lambda p: (p.line, p.column, p.key, p.said)))
    count = "1 problem" if len(unique) == 1 else f"{len(unique)} problems"
    return ConfigError("\n".join([f"{path}: {count}", *(f"  {problem}" for problem in unique)]), unique)


def read_yaml(path: Path) -> tuple[YamlTree, list[Problem]]:
    """Read a YAML 1.2 file without running anything it says.

    Returns the tree and the problems that leave the rest readable (duplicate keys, tags). A file
    that cannot be read as one mapping raises `ConfigError`.
    """
    root = _compose(path, _read_text(path))
    if root is None:
        raise config_error(path, [Problem(str(path), 1, 1, "", "the file is empty", _TOP)])
    builder = _Builder(path)
    data = builder.build(root, ())
    tree = YamlTree(path, data, builder.keys, builder.values)
    if not isinstance(data, dict):
        said = f"the file holds {described(data)} at its top"
        raise config_error(path, [*builder.problems, tree.problem((), said, allowed=_TOP)])
    return tree, builder.problems


def described(value: Any) -> str:
    """Return what stood in the file, in words a reader recognises."""
    match value:
        case None:
            return "nothing (null)"
        case bool():
            return str(value).lower()
        case dict():
            return "a mapping (key: value)"
        case list():
            return "a list"
        case str():
            return repr(value if len(value) <= 60 else value[:57] + "...")
        case _:
            return str(value)


def _read_text(path: Path) -> str:
    try:
        with path.open("rb") as file:
            content = file.read(MAX_BYTES + 1)
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise ConfigError(f"{path}: the batch file cannot be read: {reason}") from error
    if len(content) > MAX_BYTES:
        said = "the file is too large for a batch file"
        raise config_error(path, [Problem(str(path), 0, 0, "", said, f"at most {MAX_BYTES:,} bytes")])
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = content[: error.start]
        line, column = before.count(b"\n") + 1, error.start - before.rfind(b"\n")
        said = f"byte 0x{content[error.start]:02X} is not UTF-8 text"
        allowed = "UTF-8; save the file with this encoding"
        raise config_error(path, [Problem(str(path), line, column, "", said, allowed)]) from error


def _compose(path: Path, text: str) -> Any:
    """Return the root node of the one document in `text`, or None where there is none."""
    from ruamel.yaml import YAML
    from ruamel.yaml.error import MarkedYAMLError, YAMLError

    try:
        return YAML(typ="safe", pure=True).compose(text)
    except RecursionError:
        problem = Problem(str(path), 0, 0, "", "lists or mappings are nested too deeply")
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        line, column = (mark.line + 1, mark.column + 1) if mark else (0, 0)
        said = " ".join(str(part) for part in (error.context, error.problem) if part)
        problem = Problem(str(path), line, column, "", f"this is not YAML: {said}")
    except YAMLError as error:
        problem = Problem(str(path), 0, 0, "", f"this is not YAML: {' '.join(str(error).split())}")
    raise config_error(path, [problem])


class _Builder:
    """Turns nodes into plain data, noting positions; follows aliases up to a bound."""

    def __init__(self, path: Path) -> None:
        from ruamel.yaml import YAML

        self._path = path
        self._yaml = YAML(typ="safe", pure=True)
        self._open: list[Any] = []
        self._nodes = 0
        self.keys: dict[KeyPath, Position] = {}
        self.values: dict[KeyPath, Position] = {}
        self.problems: list[Problem] = []

    def build(self, node: Any, at: KeyPath) -> Any:
        """Return the data under a node."""
        self.values[at] = _position(node)
        self._nodes += 1
        if self._nodes > MAX_NODES:
            said = f"the file unfolds to more than {MAX_NODES:,} values"
            raise config_error(self._path, [self._problem(node, at, said, "fewer aliases (*name)")])
        if any(node is parent for parent in self._open):
            raise config_error(self._path, [self._problem(node, at, "an alias stands inside what it names")])
        if node.id == "scalar":
            return self._scalar(node, at)
        self._refuse_tag(node, at, "map" if node.id == "mapping" else "seq")
        self._open.append(node)
        built = dict(self._pairs(node, at)) if node.id == "mapping" else self._items(node, at)
        self._open.pop()
        return built

    def _items(self, node: Any, at: KeyPath) -> list[Any]:
        return [self.build(item, (*at, index)) for index, item in enumerate(node.value)]

    def _pairs(self, node: Any, at: KeyPath) -> Iterator[tuple[str, Any]]:
        for key_node, value_node in node.value:
            if key_node.id != "scalar":
                self.problems.append(self._problem(key_node, at, "a list or mapping stands as a key", "text"))
                continue
            key = str(key_node.value)
            path = (*at, key)
            if path in self.keys:
                said = f"the key {key!r} stands twice; first at line {self.keys[path][0]}"
                self.problems.append(self._problem(key_node, path, said, "each key once"))
                continue
            self.keys[path] = _position(key_node)
            yield key, self.build(value_node, path)

    def _scalar(self, node: Any, at: KeyPath) -> Any:
        kind = self._implicit(node)
        if self._refuse_tag(node, at, kind) or kind not in {"null", "bool", "int", "float"}:
            return str(node.value)
        return self._yaml.constructor.construct_object(node)

    def _implicit(self, node: Any) -> str:
        """Return the kind of scalar that YAML 1.2 reads where no tag is given."""
        if node.style is not None:
            return "str"
        from ruamel.yaml.nodes import ScalarNode

        tag = self._yaml.resolver.resolve(ScalarNode, node.value, (True, False))
        return str(tag).removeprefix(_CORE)

    def _refuse_tag(self, node: Any, at: KeyPath, expected: str) -> bool:
        if node.tag == _CORE + expected:
            return False
        tag = node.tag.replace(_CORE, "!!")
        self.problems.append(self._problem(node, at, f"the tag {tag!r} stands here", "values without tags"))
        return True

    def _problem(self, node: Any, at: KeyPath, said: str, allowed: str = "") -> Problem:
        return Problem(str(self._path), *_position(node), key_text(at), said, allowed)


def _position(node: Any) -> Position:
    return node.start_mark.line + 1, node.start_mark.column + 1
