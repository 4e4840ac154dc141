"""Scores of columns that are drawn, not given: other numbers of rows, and designs on paper.

A table of columns is drawn in blocks of columns, so that a million of them fit under the memory
bound; several draws of errors share one table where fresh ones would cost too much.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple, Protocol

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.core.streams import Mapper, blocks, stream
from scantling.law.families import ErrorLaw, normal_law
from scantling.planning.breakthrough import ScoreSample
from scantling.simulation.loss_scores import ROBUST, loss_scores, score_slope
from scantling.simulation.scores import Passers, centre, join, passers

MODE = "generative"
CELLS = 16_000_000
"""Most values drawn for columns: beyond it several errors share a table of columns."""
FEWEST_TABLES = 8
MANY_COLUMNS = 20_000
"""Independent columns in one table that stand for several tables."""


MANY_TABLES = 1_000_000
FEW_TABLES = 40


class Tables(NamedTuple):
    """How freely tables are drawn."""

    cells: int = CELLS
    """Most values drawn for columns, unless the fewest tables need more."""
    fewest: int = FEWEST_TABLES
    """Tables that the draws are shared among at least."""
    most: int = MANY_TABLES
    """And at most: a table of few columns has its cost too."""


TABLES = Tables()

BLOCK_CELLS = 2_000_000
"""Values of a block of columns: 16 MB, so that a block's products stay in the cache's reach."""
ERROR_CELLS = 4_000_000
"""Most errors drawn for all tables at once (32 MB)."""
SMALLEST_SHARE = 1e-12
"""Mean square below which, relative to the largest of its block, a column counts as constant."""


class ColumnSource(Protocol):
    """What draws columns, and the errors that belong to them."""

    @property
    def independent(self) -> bool:
        """Whether columns are independent and alike, so that many in one table do the work of
        several tables."""

    @property
    def most_tables(self) -> int:
        """Tables drawn at most: each has a cost of its own where rows follow one another."""

    @property
    def divisible(self) -> bool:
        """Whether blocks of a table's columns may be drawn one by one."""

    def errors(self, law: ErrorLaw, rows: int, draws: int, seed: int, table: int) -> FloatArray:
        """Draws of errors that share a table of columns, shape (rows, draws)."""

    def errors_at_once(self, law: ErrorLaw, rows: int, draws: int, seed: int) -> FloatArray | None:
        """Draws of errors for all tables, shape (rows, draws); None: each table has its own."""

    def columns(self, rows: int, start: int, stop: int, seed: int, table: int) -> FloatArray:
        """Columns start..stop of a table, one a row, on any scale: shape (stop - start, rows)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StatedColumns:
    """Columns of one stated law, independent or with the same correlation between all."""

    law: ErrorLaw
    """Of every column."""
    correlation: float = 0.0
    """Between every two columns; they share one factor drawn from the same law."""
    ordered_errors: bool = False
    """Whether the errors beside them follow one another in time, by volatility or level."""

    @property
    def independent(self) -> bool:
        """Unless they are correlated."""
        return self.correlation == 0

    @property
    def most_tables(self) -> int:
        """Few where columns or errors follow a recursion through the rows, one for each table."""
        return FEW_TABLES if self.ordered_errors or self.law.ordered else MANY_TABLES

    @property
    def divisible(self) -> bool:
        """Always: what they share is the factor."""
        return True

    def errors(self, law: ErrorLaw, rows: int, draws: int, seed: int, table: int) -> FloatArray:
        """Independent of the columns."""
        return law.draw((rows, draws), stream(seed, "stated errors", table))

    def errors_at_once(self, law: ErrorLaw, rows: int, draws: int, seed: int) -> FloatArray | None:
        """Where they follow a recursion: a step in time costs about the same for all of them."""
        if not law.ordered or rows * draws > ERROR_CELLS:
            return None
        return law.draw((rows, draws), stream(seed, "stated errors at once"))

    def columns(self, rows: int, start: int, stop: int, seed: int, table: int) -> FloatArray:
        """Each block from its own stream, the factor from the table's."""
        rng = stream(seed, "stated columns", table, start)
        drawn = self.law.draw((rows, stop - start), rng).T if self.law.ordered else (
            self.law.draw((stop - start, rows), rng)
        )  # fmt: skip
        if self.correlation == 0:
            return drawn
        factor = self.law.draw(rows, stream(seed, "stated factor", table))
        return np.asarray(
            math.sqrt(self.correlation) * factor + math.sqrt(1 - self.correlation) * drawn
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class ScorePiece:
    """Scores of some columns of some tables under one law."""

    found: Passers
    """Ratios above the floor."""
    loading: float
    """Typical loading; weighted by columns and draws when pieces are put together."""
    size: float
    """Typical root mean square of the errors."""
    slope: float
    """Of the loss's mean score."""
    square: float
    """Mean square of the loss's score."""


def tables_for(source: ColumnSource, columns: int, tables: Tables = TABLES) -> Tables:
    """Fewer where each is costly, or independent columns are so many that one has them all."""
    tables = tables._replace(most=min(tables.most, source.most_tables))
    if not source.independent:
        return tables
    return tables._replace(fewest=min(tables.fewest, math.ceil(MANY_COLUMNS / columns)))


def tables_of(
    rows: int, columns: int, draws: int, tables: Tables = TABLES
) -> list[tuple[int, int]]:
    """Which draws share a table: (start, stop) of each; fresh tables where affordable."""
    affordable = min(tables.cells // (rows * columns), tables.most)
    shared = math.ceil(draws / min(draws, max(tables.fewest, affordable)))
    return blocks(draws, shared)


def generative_scores(
    source: ColumnSource, laws: tuple[ErrorLaw, ...], *, rows: int, columns: int, draws: int,
    rule: str, loss: str, floor: float, seed: int, mapper: Mapper, tables: Tables = TABLES,
) -> tuple[ScoreSample, ...]:  # fmt: skip
    """Scores under errors of each law, on the same drawn columns.

    Parameters
    ----------
    source : ColumnSource
    laws : tuple of ErrorLaw
    rows, columns, draws : int
    rule : {'plug-in', 'self-normalised'}
    loss : {'squared', 'huber', 'absolute', 'square-root'}
    floor : float
        Ratios at or below it are not kept.
    seed : int
    mapper : callable
    tables : Tables

    Returns
    -------
    tuple of ScoreSample, one for each law
        Their loadings have shape (1,): columns are alike.
    """
    parts = tables_of(rows, columns, draws, tables)
    pieces = pieces_of(source, rows, columns)
    units = [(table, *piece) for table in range(len(parts)) for piece in pieces]

    whole = [source.errors_at_once(law, rows, draws, seed) for law in laws]
    kept: dict[int, list[FloatArray]] = {}  # the last table's errors, for its next block

    def one(unit: tuple[int, int, int]) -> tuple[ScorePiece, ...]:
        table, start, stop = unit
        first, last = parts[table]
        X = source.columns(rows, start, stop, seed, table)
        if table not in kept:
            kept.clear()
            kept[table] = [
                centre(
                    source.errors(law, rows, last - first, seed, table)
                    if every is None
                    else every[:, first:last]
                )
                for law, every in zip(laws, whole, strict=True)
            ]
        return _pieces(X, kept[table], rule, loss, floor)

    # Small tables are taken many at a time: one of them is less work than its handling.
    together = max(1, BLOCK_CELLS // (8 * rows * columns)) if len(pieces) == 1 else 1
    chunks = [units[a:b] for a, b in blocks(len(units), together)]
    done = [
        piece
        for several in mapper(lambda chunk: tuple(one(unit) for unit in chunk), chunks)
        for piece in several
    ]
    widths = [stop - start for _, start, stop in units]
    counts = [parts[table][1] - parts[table][0] for table, _, _ in units]
    weights = np.array(widths) * np.array(counts)
    return tuple(
        _sample(
            [each[k] for each in done], weights, len(pieces), [a for a, _ in pieces], columns, loss
        )
        for k in range(len(laws))
    )


def pieces_of(source: ColumnSource, rows: int, columns: int) -> list[tuple[int, int]]:
    """Blocks of columns (start, stop) that a table is drawn in."""
    return blocks(columns, max(1, BLOCK_CELLS // rows) if source.divisible else columns)


def _pieces(
    X: FloatArray, errors: list[FloatArray], rule: str, loss: str, floor: float
) -> tuple[ScorePiece, ...]:
    """Scores of columns given one a row and not standardised, without a standardised copy."""
    rows = X.shape[1]
    scores = [loss_scores(e, loss) for e in errors]
    psi = np.hstack(scores)
    products = X @ psi
    np.abs(products, out=products)
    mean = X.mean(axis=1)
    square = np.einsum("ij,ij->i", X, X) / rows - mean**2
    usable = square > SMALLEST_SHARE * max(float(square.max()), 1e-300)
    scale = np.where(usable, 1 / np.sqrt(np.where(usable, square, 1.0)), 0.0)
    loadings = np.sqrt((psi**2).mean(axis=0))
    if rule == "self-normalised":
        second = psi**2
        raw = (X**2) @ second - 2 * mean[:, None] * (X @ second)
        raw = raw / rows + mean[:, None] ** 2 * second.mean(axis=0)
        own = np.sqrt(np.maximum(raw, 0.0)) * scale[:, None]
        products *= scale[:, None] / math.sqrt(rows)
        products /= np.maximum(own, np.finfo(float).tiny)
    else:
        own = loadings[None]
        products *= (scale / math.sqrt(rows))[:, None]
        products /= np.maximum(loadings, np.finfo(float).tiny)
    out = []
    start = 0
    for e, each in zip(errors, scores, strict=True):
        mine = slice(start, start + e.shape[1])
        start += e.shape[1]
        out.append(
            ScorePiece(
                found=passers(products[:, mine], floor),
                loading=float(np.median(own[:, mine])),
                size=float(np.median(np.sqrt((e**2).mean(axis=0)))),
                slope=score_slope(e, loss),
                square=float((each**2).mean()),
            )
        )
    return tuple(out)


def _sample(
    pieces: list[ScorePiece],
    weights: FloatArray,
    per_table: int,
    starts: list[int],
    columns: int,
    loss: str,
) -> ScoreSample:
    """Pieces in order (table by table, columns rising) put together."""
    tables = []
    for k in range(0, len(pieces), per_table):
        mine = [piece.found for piece in pieces[k : k + per_table]]
        tables.append(
            mine[0] if per_table == 1 else Passers(
                columns=columns,
                draws=mine[0].draws,
                draw=np.concatenate([part.draw for part in mine]),
                column=np.concatenate(
                    [part.column + np.int32(a) for part, a in zip(mine, starts, strict=True)]
                ),
                ratio=np.concatenate([part.ratio for part in mine]),
            )
        )  # fmt: skip
    return ScoreSample(
        found=join(tables),
        loadings=read_only(np.array([weighted_median([p.loading for p in pieces], weights)])),
        typical_sd=weighted_median([p.size for p in pieces], weights),
        slope=float(np.average([p.slope for p in pieces], weights=weights)),
        row_squares=None
        if loss not in ROBUST
        else read_only(np.array([np.average([p.square for p in pieces], weights=weights)])),
    )


def weighted_median(values: list[float], weights: FloatArray) -> float:
    """Smallest value that at least half of the weight does not exceed."""
    order = np.argsort(values, kind="stable")
    below = np.cumsum(np.asarray(weights, dtype=np.float64)[order])
    return float(np.asarray(values)[order[int(np.searchsorted(below, below[-1] / 2))]])


def twin_of(law: ErrorLaw) -> ErrorLaw:
    """Independent normal errors of the same variance, or of variance 1 where it has none."""
    return normal_law(law.sd if math.isfinite(law.sd) else 1.0)


def table_of(source: ColumnSource, *, rows: int, columns: int, seed: int, table: int) -> FloatArray:
    """One whole table, standardised on the sample: shape (rows, columns)."""
    pieces: Iterator[FloatArray] = (
        source.columns(rows, a, b, seed, table) for a, b in pieces_of(source, rows, columns)
    )
    X = np.concatenate(list(pieces)).T
    X = X - X.mean(axis=0)
    scale = np.sqrt((X**2).mean(axis=0))
    return np.ascontiguousarray(X / np.where(scale > 0, scale, 1.0))
