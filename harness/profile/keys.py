"""Which keys a profile may have and what type they are, the chosen drivers' own keys among them."""

from __future__ import annotations

import types
from collections.abc import Callable, Iterator
from pathlib import PurePath
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from .links import DrivenSection

SectionOf = Callable[[type[DrivenSection], Any], type[BaseModel] | None]


def leaves(annotation: Any) -> Iterator[Any]:
    """Give the members of a type without Annotated, Union and None around them."""
    origin = get_origin(annotation)
    if origin is Annotated:
        yield from leaves(get_args(annotation)[0])
    elif origin in (Union, types.UnionType):
        for member in get_args(annotation):
            yield from leaves(member)
    elif annotation is not type(None):
        yield annotation


def is_text(annotation: Any) -> bool:
    """Whether only text fits, so that a value on the command line is taken as it stands."""
    for leaf in leaves(annotation):
        if get_origin(leaf) is Literal:
            if not all(isinstance(v, str) for v in get_args(leaf)):
                return False
        elif not (isinstance(leaf, type) and issubclass(leaf, str | PurePath)):
            return False
    return True


def _fits(model: type[BaseModel], raw: Any) -> bool:
    """Whether a union's member is the one that the section chose: its Literal keys agree."""
    if not isinstance(raw, dict):
        return True
    for name, field in model.model_fields.items():
        if get_origin(field.annotation) is Literal and field.is_required() and name in raw:
            return raw[name] in get_args(field.annotation)
    return True


class Keys:
    """The tree of known keys for one profile.

    Parameters
    ----------
    root
        The profile's model.
    section_of
        Gives the driver's own section for a driven section's class and raw content, or None.
    """

    def __init__(self, root: type[BaseModel], section_of: SectionOf) -> None:
        self._root = root
        self._section_of = section_of

    def _fields(self, model: type[BaseModel], raw: Any) -> dict[str, FieldInfo]:
        fields = dict(model.model_fields)
        if issubclass(model, DrivenSection):
            del fields["options"]
            own = self._section_of(model, raw)
            if own is not None:
                fields = {**own.model_fields, **fields}
        return fields

    def _below(self, annotation: Any, raw: Any) -> dict[str, Any]:
        """Keys in a section of this type: name -> type; a free name is ``*``."""
        out: dict[str, Any] = {}
        for leaf in leaves(annotation):
            origin = get_origin(leaf)
            if origin is dict:
                out["*"] = get_args(leaf)[1]
            elif origin in (tuple, list) and get_args(leaf):
                item = raw[0] if isinstance(raw, list) and raw else raw
                out |= self._below(get_args(leaf)[0], item)
            elif isinstance(leaf, type) and issubclass(leaf, BaseModel) and _fits(leaf, raw):
                out |= {name: f.annotation for name, f in self._fields(leaf, raw).items()}
        return out

    def at(self, path: tuple[str | int, ...], raw: Any) -> Any:
        """Give the type of the value at `path`, or None where no such key is known."""
        annotation: Any = self._root
        node = raw
        for part in path:
            if isinstance(part, int):
                items = [
                    a
                    for leaf in leaves(annotation)
                    if get_origin(leaf) in (tuple, list)
                    for a in get_args(leaf)
                    if a is not Ellipsis
                ]
                annotation = Union[tuple(items)] if items else None  # noqa: UP007
                node = node[part] if isinstance(node, list) and part < len(node) else None
            else:
                below = self._below(annotation, node)
                annotation = below.get(part, below.get("*"))
                node = node.get(part) if isinstance(node, dict) else None
            if annotation is None:
                return None
        return annotation

    def in_section(self, path: tuple[str | int, ...], raw: Any) -> list[str]:
        """Give the keys known in the section at `path`; a section with free names has none."""
        node = raw
        for part in path:
            try:
                node = node[part]
            except (KeyError, IndexError, TypeError):
                node = None
        annotation = self.at(path, raw)
        return [name for name in self._below(annotation, node) if name != "*"]

    def everywhere(self, raw: Any) -> list[tuple[str, ...]]:
        """Give the paths of all known keys, list indices left out."""
        out: list[tuple[str, ...]] = []

        def walk(annotation: Any, node: Any, path: tuple[str, ...]) -> None:
            if len(path) > 6:
                return
            if isinstance(node, list):
                node = node[0] if node else None
            for name, below in self._below(annotation, node).items():
                if name == "*":
                    names = list(node) if isinstance(node, dict) else []
                    for free in names:
                        walk(below, node[free], (*path, free))
                    continue
                out.append((*path, name))
                walk(below, node.get(name) if isinstance(node, dict) else None, (*path, name))

        walk(self._root, raw, ())
        return out
