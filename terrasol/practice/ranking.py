"""Order parcels by a score that the user writes, with what each of its terms contributes."""

from __future__ import annotations

import ast
from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import rankdata

from terrasol.practice.expression import Needs, evaluate, names_in, nothing_needed, parse


@dataclass(frozen=True)
class Score:
    """A sum of terms over figures of a parcel; see `parse_score`.

    Attributes
    ----------
    text
        As the user wrote it.
    names
        Figures that it speaks of.
    terms
        Its terms, written with their signs; they add up to the score.
    """

    text: str
    names: tuple[str, ...]
    terms: tuple[str, ...]
    _trees: tuple[ast.expr, ...]


@dataclass(frozen=True, eq=False)
class Ranking:
    """Scores of parcels.

    Attributes
    ----------
    contributions
        Of each term to each parcel's score; (parcels, terms).
    total
        The scores; NaN where a figure is unknown; (parcels,).
    rank
        1 for the highest score; equal scores share a rank, and the next one counts on past them;
        0 where there is no score; (parcels,).
    order
        Parcels from the highest score to the lowest, those without a score last; (parcels,).
    """

    contributions: NDArray[np.float64]
    total: NDArray[np.float64]
    rank: NDArray[np.int64]
    order: NDArray[np.int64]


def parse_score(text: str, known: Collection[str], needs: Needs = nothing_needed) -> Score:
    """Read a score such as ``2 * share_of_level - 0.02 * slope_percent_mean``.

    Parameters
    ----------
    text : str
        Numbers, names, + - * / and brackets. What stands between plus and minus signs outside
        brackets is a term.
    known : collection of str
        Names of the figures that every parcel has.
    needs : callable
        Says of another name what would make it known, or nothing.

    Raises
    ------
    SettingError
        A text that is no such score; the message names what is wrong and lists the known names.

    Examples
    --------
    >>> parse_score("2 * a - (b - 1) / 3", ["a", "b"]).terms
    ('2 * a', '-(b - 1) / 3')
    """
    tree = parse(text, known, what="score", logical=False, needs=needs)
    trees = tuple(_terms(tree, positive=True))
    return Score(text.strip(), names_in(tree), tuple(ast.unparse(t) for t in trees), trees)


def rank(score: Score, figures: Mapping[str, ArrayLike]) -> Ranking:
    """Score parcels and put them in order.

    Parameters
    ----------
    score : Score
    figures : mapping of str to array_like, each (parcels,)
        NaN where unknown.

    Returns
    -------
    Ranking
        The higher the score the better.
    """
    count = np.broadcast_shapes(*(np.shape(values) for values in figures.values()))
    contributions = np.stack(
        [np.broadcast_to(evaluate(tree, figures), count) for tree in score._trees], axis=-1
    )
    total = contributions.sum(axis=-1)
    known = ~np.isnan(total)
    place = np.zeros(total.shape, np.int64)
    place[known] = rankdata(-total[known], method="min")
    return Ranking(contributions, total, place, np.argsort(-total, kind="stable"))


def _terms(node: ast.expr, *, positive: bool) -> list[ast.expr]:
    """Terms of a sum, each with its sign."""
    match node:
        case ast.BinOp(left=left, op=ast.Add(), right=right):
            return _terms(left, positive=positive) + _terms(right, positive=positive)
        case ast.BinOp(left=left, op=ast.Sub(), right=right):
            return _terms(left, positive=positive) + _terms(right, positive=not positive)
        case ast.UnaryOp(op=ast.USub(), operand=part):
            return _terms(part, positive=not positive)
        case ast.UnaryOp(op=ast.UAdd(), operand=part):
            return _terms(part, positive=positive)
    return [node if positive else _negated(node)]


def _negated(node: ast.expr) -> ast.expr:
    """Minus a product, with the sign at its first factor, where one reads it."""
    if isinstance(node, ast.BinOp) and isinstance(node.op, ast.Mult | ast.Div):
        return ast.BinOp(_negated(node.left), node.op, node.right)
    return ast.UnaryOp(ast.USub(), node)
