"""Covers: the classes of a map, and groups of them measured as one."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from geofractal.errors import ConfigError
from geofractal.landcover.strips import NOT_COVERED, Strip


@dataclass(frozen=True)
class Pack:
    """Covers that share no class, so that one map tells them apart.

    Attributes
    ----------
    names : of the covers; empty for the classes themselves
    members : classes of each cover
    """

    names: tuple[str, ...] = ()
    members: tuple[frozenset[str], ...] = ()

    def table(self, classes: Sequence[str]) -> NDArray[np.int16]:
        """Return the cover of each class, the one after the last for the rest; last: of no class."""
        of = {name: i for i, group in enumerate(self.members) for name in group}
        covers = [of.get(name, len(self.names)) for name in classes]
        return np.array([*covers, NOT_COVERED], np.int16)

    def remap(self, strips: Iterable[Strip], classes: Sequence[str]) -> Iterator[Strip]:
        """Yield strips with covers in place of classes; `classes` may grow as strips are read."""
        for strip in strips:
            if not self.names:
                yield strip
            else:
                yield replace(strip, codes=self.table(classes)[strip.codes])

    def covers(self, classes: Sequence[str]) -> tuple[str, ...]:
        """Return the names of its covers."""
        return self.names or tuple(classes)


def pack_groups(groups: Mapping[str, Iterable[str]]) -> tuple[Pack, ...]:
    """Return groups of classes in packs, greedily in their order.

    Raises
    ------
    ConfigError
        a group without classes
    """
    packs: list[dict[str, frozenset[str]]] = []
    for name, classes in groups.items():
        members = frozenset(classes)
        if not members:
            raise ConfigError(f"The group {name!r} has no classes.")
        free = next((one for one in packs if not members.intersection(*[set().union(*one.values())])), None)
        if free is None:
            packs.append({name: members})
        else:
            free[name] = members
    return tuple(Pack(tuple(one), tuple(one.values())) for one in packs)


def asked_packs(
    covers: Collection[str], groups: Mapping[str, Iterable[str]], always: Collection[str] = ()
) -> tuple[Pack, ...]:
    """Return the packs of what is asked for: the classes, then groups; all of it where `covers` is empty.

    Where no class is asked for, those that are `always` told apart are groups of their own.
    """
    classes = not covers or any(name not in groups for name in covers)
    wanted = {name: groups[name] for name in covers or groups if name in groups}
    if classes:
        return (Pack(), *pack_groups(wanted))
    return pack_groups(wanted | {name: (name,) for name in always})
