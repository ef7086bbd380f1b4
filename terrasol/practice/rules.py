"""Which cells meet a rule that the user writes, and which of them lie together."""

from __future__ import annotations

import ast
from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage

from terrasol.errors import SettingError
from terrasol.practice.expression import Needs, evaluate, names_in, nothing_needed, parse


@dataclass(frozen=True)
class Rule:
    """A condition on the quantities of a cell; see `parse_rule`.

    Attributes
    ----------
    text
        As the user wrote it.
    names
        Quantities that it speaks of.
    """

    text: str
    names: tuple[str, ...]
    _tree: ast.expr


@dataclass(frozen=True, eq=False)
class Verdict:
    """Where a rule is met.

    Attributes
    ----------
    met
        True where the rule holds.
    unknown
        True where it cannot be told, for want of a quantity that it needs there.
    """

    met: NDArray[np.bool_]
    unknown: NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Patches:
    """Connected patches of cells that are large enough.

    Attributes
    ----------
    kept
        True in the cells of kept patches.
    label
        Patch of each cell, 1 for the largest; 0 in none.
    areas
        Of the kept patches, largest first [m2].
    ignored_area, ignored
        Area [m2] and number of the patches left out.
    """

    kept: NDArray[np.bool_]
    label: NDArray[np.int64]
    areas: NDArray[np.float64]
    ignored_area: float
    ignored: int


def parse_rule(text: str, known: Collection[str], needs: Needs = nothing_needed) -> Rule:
    """Read a rule such as ``slope_percent < 15 and share_of_level >= 0.95``.

    Parameters
    ----------
    text : str
        Comparisons of numbers, names and + - * /, joined by and, or, not and brackets.
    known : collection of str
        Names of the quantities that every cell has.
    needs : callable
        Says of another name what would make it known, or nothing.

    Raises
    ------
    SettingError
        A text that is no such rule; the message names what is wrong and lists the known names.

    Examples
    --------
    >>> rule = parse_rule("5 <= slope_percent < 15", ["slope_percent"])
    >>> meet(rule, {"slope_percent": [3.0, 5.0, 20.0]}).met.tolist()
    [False, True, False]
    """
    tree = parse(text, known, what="rule", logical=True, needs=needs)
    return Rule(text.strip(), names_in(tree), tree)


def meet(rule: Rule, quantities: Mapping[str, ArrayLike]) -> Verdict:
    """Ask every cell whether it meets a rule.

    Parameters
    ----------
    rule : Rule
    quantities : mapping of str to array_like
        One array a name, broadcast together; NaN where void.

    Returns
    -------
    Verdict
        A cell is unknown only if what it lacks would decide: flat ground without an aspect meets
        ``slope_percent < 5 or aspect > 90``.
    """
    shape = np.broadcast_shapes(*(np.shape(quantities[name]) for name in rule.names))
    truth = np.broadcast_to(evaluate(rule._tree, quantities), shape)
    return Verdict(truth == 1.0, np.isnan(truth))


def keep_patches(
    mask: NDArray[np.bool_], area: ArrayLike, least: float, *, corners: bool = False
) -> Patches:
    """Leave out connected patches smaller than an area.

    Parameters
    ----------
    mask : ndarray of bool, shape (rows, columns)
        Cells that met a rule, on the raster's grid.
    area : array_like
        Of each cell [m2], broadcast against `mask`; that of rim cells within the parcel.
    least : float
        A patch of this area or more is kept [m2]. 0 keeps all.
    corners : bool
        Whether cells that touch at a corner alone lie together. By default they do not: no row of
        vines and no machine passes from one to the other (judgement, no source).

    Returns
    -------
    Patches

    Raises
    ------
    SettingError
        A least area below 0.
    """
    if not least >= 0.0:
        raise SettingError(f"least area of a patch, {least:g} m2, must be 0 or more")
    weight = np.broadcast_to(np.asarray(area, np.float64), mask.shape)
    label, count = ndimage.label(mask & (weight > 0.0), np.ones((3, 3)) if corners else None)
    areas = np.bincount(label.ravel(), weights=weight.ravel(), minlength=count + 1)[1:]
    large = areas >= least * (1.0 - 1e-12)
    order = np.flatnonzero(large)[np.argsort(-areas[large], kind="stable")]
    rank = np.zeros(count + 1, np.int64)
    rank[order + 1] = np.arange(1, order.size + 1)
    ranked = rank[label]
    return Patches(
        ranked > 0,
        ranked,
        areas[order].astype(np.float64),
        float(areas[~large].sum()),
        int((~large).sum()),
    )
