"""Class codes and names, the (from, to) order of transitions, and named change classes.

Two rules live here and nowhere else. A transition is always written (from, to), and shown as ``from>to``.
A change class is a recipe over such pairs, and of several recipes the first that fits wins.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from change_assess.errors import InputError, nearest

ARROW = ">"
"""Stands between the two classes of a transition; forbidden in class names."""

ANY = "*"
"""In a recipe: every class that the other side of the recipe does not name."""

NO_CHANGE, CHANGE = "no change", "change"
OTHER_NO_CHANGE, OTHER_CHANGE = "other no change", "other change"
RESERVED = {NO_CHANGE, CHANGE, OTHER_NO_CHANGE, OTHER_CHANGE}
"""Names of what no recipe matches; persistence is *other no change* where a recipe names some of it."""


def pair_name(first: str, second: str) -> str:
    """Name of the transition from class `first` to class `second`."""
    return f"{first}{ARROW}{second}"


@dataclass(frozen=True)
class LegendClass:
    """One class: its code in rasters, its name, and optionally a colour (#rrggbb) and a group."""

    code: int
    name: str
    colour: str = ""
    group: str = ""


@dataclass(frozen=True)
class Legend:
    """An ordered set of classes; codes and names are unique.

    Raises
    ------
    InputError
        For a repeated code or name, an empty name, or a name that holds ``>``.
    """

    classes: tuple[LegendClass, ...]
    file: str = "legend"

    def __post_init__(self) -> None:
        seen: dict[object, int] = {}
        for row, item in enumerate(self.classes, start=2):
            check_class_name(item.name, file=self.file, row=row)
            for key in (item.code, item.name):
                if key in seen:
                    raise InputError(
                        f"'{key}' stands twice in the legend (first in row {seen[key]})",
                        file=self.file,
                        row=row,
                        value=key,
                        mend="Give every class its own code and name.",
                    )
                seen[key] = row

    @classmethod
    def of_names(cls, names: Iterable[str], file: str = "legend") -> Legend:
        """Legend whose codes are 1, 2, … in the order of `names`."""
        return cls(tuple(LegendClass(i, name) for i, name in enumerate(names, start=1)), file)

    @property
    def names(self) -> list[str]:
        """Class names in legend order."""
        return [c.name for c in self.classes]

    @property
    def codes(self) -> list[int]:
        """Raster codes in legend order."""
        return [c.code for c in self.classes]

    def index(self, label: object) -> int | None:
        """Position of a class given by name or by code (2, ``"2"`` and ``2.0`` are one code); None if unknown."""
        text = str(label).strip()
        names = self._positions
        if text in names:
            return names[text]
        whole = whole_number(text)
        return self._code_positions.get(whole) if whole is not None else None

    def members(self, word: str) -> list[str]:
        """Names of the classes meant by a class name, a code, or a group name; empty if unknown."""
        position = self.index(word)
        if position is not None:
            return [self.names[position]]
        return [c.name for c in self.classes if c.group and c.group == word]

    @cached_property
    def _positions(self) -> dict[str, int]:
        return {c.name: i for i, c in enumerate(self.classes)}

    @cached_property
    def _code_positions(self) -> dict[int, int]:
        return {c.code: i for i, c in enumerate(self.classes)}


_WHOLE = re.compile(r"[+-]?[0-9]+(\.0*)?")


def whole_number(text: str) -> int | None:
    """Read ``"3"`` or ``"3.0"`` as 3; anything else, 2.5 included, is None."""
    return int(text.partition(".")[0]) if _WHOLE.fullmatch(text) else None


def check_class_name(name: str, *, file: str | None = None, row: int | None = None, column: str | None = None) -> None:
    """Refuse names that would make a transition ambiguous."""
    if not name.strip():
        raise InputError("a class has no name", file=file, row=row, column=column, mend="Name it.")
    if ARROW in name:
        raise InputError(
            f"the class name '{name}' holds '{ARROW}', which stands between the two classes of a transition",
            file=file,
            row=row,
            column=column,
            value=name,
            mend="Rename the class.",
        )


@dataclass(frozen=True)
class ChangeClass:
    """A named change: any of `before` turning into any of `after` (class names, codes, groups, or ``*``)."""

    name: str
    before: tuple[str, ...]
    after: tuple[str, ...]

    @classmethod
    def parse(cls, text: str) -> ChangeClass:
        """Read ``"forest loss=forest>cropland,pasture"``; ``*`` is every class the other side does not name."""
        name, equals, recipe = text.partition("=")
        before, arrow, after = recipe.partition(ARROW)
        sides = [tuple(w.strip() for w in side.split(",") if w.strip()) for side in (before, after)]
        if not (name.strip() and equals and arrow and all(sides)):
            raise InputError(
                f"the change class '{text}' cannot be read",
                value=text,
                mend='Write it as "NAME=FROM,…>TO,…", for example "forest loss=forest>cropland,pasture".',
            )
        return cls(name.strip(), *sides)


@dataclass(frozen=True)
class ChangeClasses:
    """Recipes over (from, to) pairs, first match wins; what none matches is *no change* or *other change*.

    Examples
    --------
    >>> recipes = ChangeClasses((ChangeClass("forest loss", ("forest",), ("*",)),))
    >>> names, table = recipes.table(Legend.of_names(["forest", "crop", "water"]))
    >>> names
    ['forest loss', 'no change', 'other change']
    >>> table.tolist()
    [[1, 0, 0], [2, 1, 2], [2, 2, 1]]
    """

    recipes: tuple[ChangeClass, ...] = field(default=())

    @classmethod
    def of(cls, recipes: ChangeClasses | Iterable[str | ChangeClass]) -> ChangeClasses:
        """Take recipes as they are or as texts such as ``"forest loss=forest>*"``."""
        if isinstance(recipes, ChangeClasses):
            return recipes
        if isinstance(recipes, str):
            recipes = [recipes]
        return cls(tuple(r if isinstance(r, ChangeClass) else ChangeClass.parse(r) for r in recipes))

    def table(self, legend: Legend) -> tuple[list[str], NDArray[np.intp]]:
        """Resolve the recipes for one legend.

        Returns
        -------
        names : list of str
            Change-class names in order of their recipes, then *no change* (*other no change* where a recipe names
            some persistence) and *other change*.
        table : ndarray of int, shape (K, K)
            Position in `names` of the transition from class i (row) to class j (column).

        Raises
        ------
        InputError
            For a recipe that names an unknown class, or is called like what no recipe matches.
        """
        for recipe in self.recipes:
            if recipe.name.casefold() in RESERVED:
                raise InputError(
                    f"a change class cannot be called '{recipe.name}': that is what no recipe matches",
                    value=recipe.name,
                    mend="Choose another name.",
                )
        sides = [self._sides(recipe, legend) for recipe in self.recipes]
        persistence = any(set(before) & set(after) for before, after in sides)
        rest = [OTHER_NO_CHANGE if persistence else NO_CHANGE, OTHER_CHANGE]
        names = list(dict.fromkeys([r.name for r in self.recipes] + rest))
        size = len(legend.classes)
        table = np.full((size, size), names.index(OTHER_CHANGE), dtype=np.intp)
        np.fill_diagonal(table, names.index(rest[0]))
        for recipe, (before, after) in zip(reversed(self.recipes), reversed(sides), strict=True):
            table[np.ix_(before, after)] = names.index(recipe.name)
        return names, table

    @staticmethod
    def _sides(recipe: ChangeClass, legend: Legend) -> tuple[list[int], list[int]]:
        check_class_name(recipe.name)
        every = legend.names
        named = [_resolve(side, legend, recipe.name) for side in (recipe.before, recipe.after)]
        sides = [
            [n for n in every if n not in other] if mine is None else mine
            for mine, other in ((named[0], named[1] or []), (named[1], named[0] or []))
        ]
        return [every.index(n) for n in sides[0]], [every.index(n) for n in sides[1]]


def _resolve(words: Sequence[str], legend: Legend, recipe: str) -> list[str] | None:
    if ANY in words:
        return None
    found: list[str] = []
    for word in words:
        members = legend.members(word)
        if not members:
            known = legend.names + sorted({c.group for c in legend.classes if c.group})
            raise InputError(
                f"the change class '{recipe}' names '{word}', which is neither a class nor a group of the legend",
                value=word,
                mend=f"Use a legend name, code or group.{nearest(word, known)}",
            )
        found += members
    return found
