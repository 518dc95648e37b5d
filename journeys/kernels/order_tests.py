"""Chi-square tests of transition counts, corrected for customers who make many moves.

Tests of order and of the equality of tables ask one thing: within each stratum (the present state), does the column
(the next state) depend on the row (an earlier state, or which of several tables it is)? Counts come as one line per
filled cell and bucket. For a given matrix see `kernels.agreement`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from journeys.kernels.arrays import FloatArray, IntArray, distinct, sum_at


@dataclass(frozen=True, eq=False)
class Counts:
    """Moves counted by bucket of customers, stratum, row and column, each numbered from 0; lines may repeat.

    Attributes
    ----------
    bucket, stratum, row, column : int arrays, shape (n_lines,)
    n : float array, shape (n_lines,)
    """

    bucket: IntArray
    stratum: IntArray
    row: IntArray
    column: IntArray
    n: FloatArray

    @classmethod
    def of_tables(cls, tables: npt.ArrayLike) -> Counts:
        """Return the counts of full tables, shape (n_strata, n_rows, n_columns), all in one bucket."""
        table = np.asarray(tables, dtype=np.float64)
        stratum, row, column = np.nonzero(table)
        return cls(np.zeros(len(row), np.int64), stratum, row, column, table[stratum, row, column])


@dataclass(frozen=True, eq=False)
class TableTests:
    """One test per stratum, and what they make together.

    Attributes
    ----------
    x2, g2 : float arrays, shape (n_strata,)
        Pearson's statistic and that of the likelihood ratio.
    df : int array, shape (n_strata,)
        (Rows filled - 1) x (columns filled - 1).
    n : float array, shape (n_strata,)
        Moves.
    spread : float array, shape (n_strata,)
        Sum of the squared residuals of the buckets over what is expected: `df` on average where moves are independent.
    """

    x2: FloatArray
    g2: FloatArray
    df: IntArray
    n: FloatArray
    spread: FloatArray

    @property
    def design_effect(self) -> FloatArray:
        """How many times larger each statistic is on average than with independent moves; NaN without freedom."""
        return _ratio(self.spread, self.df)

    @property
    def corrected(self) -> FloatArray:
        """Pearson's statistics divided by their design effects."""
        return _ratio(self.x2, self.design_effect)

    @property
    def p_value(self) -> FloatArray:
        """Of the corrected statistics; NaN without freedom."""
        return chi_square_p(self.corrected, self.df)

    def together(self) -> TableTests:
        """Return the one test of all strata."""
        parts = (self.x2, self.g2, self.df, self.n, self.spread)
        return TableTests(*(part.sum(keepdims=True) for part in parts))


def table_tests(counts: Counts) -> TableTests:
    """Test in each stratum whether columns are independent of rows.

    Parameters
    ----------
    counts : Counts
        An order test: strata are the histories of the lower order, rows the state before them, columns the next
        state. Equality of several transition tables: strata are states, rows tables. Independence of successive
        states: one stratum, rows are states.

    Returns
    -------
    TableTests

    Notes
    -----
    With o the count of a cell and e = row x column / total, X2 = sum (o - e)^2 / e. Moves of one customer are alike,
    which makes X2 too large; it is divided by deltabar = sum_b sum_cells r^2 / e / df, where bucket b has the
    linearised residual r = o_b - e (row_b / row + column_b / column - total_b / total), and then compared with the chi
    square distribution of df: the mean correction of Rao and Scott. Since sum_cells r^2 / e = sum o_b^2 / e - sum
    row_b^2 / row - sum column_b^2 / column + total_b^2 / total, only filled cells are gone through.

    References
    ----------
    M. S. Bartlett, The frequency goodness of fit test for probability chains, Proc. Camb. Phil. Soc. 47 (1951) 86-95.
    T. W. Anderson, L. A. Goodman, Statistical inference about Markov chains, Ann. Math. Statist. 28 (1957) 89-110.
    J. N. K. Rao, A. J. Scott, The analysis of categorical data from complex sample surveys, J. Amer. Statist. Assoc.
    76 (1981) 221-230.

    Examples
    --------
    Dry and wet days of Tel Aviv: is a day like the day before? (K. R. Gabriel, J. Neumann, Quart. J. Roy. Met. Soc.
    88 (1962) 90-95.)

    >>> found = table_tests(Counts.of_tables([[[1049, 350], [351, 687]]]))
    >>> found.x2.round(2).tolist(), found.df.tolist()
    ([413.11], [1])
    """
    n_strata = int(counts.stratum.max()) + 1 if len(counts.n) else 0
    width_row, width = _size(counts.row), _size(counts.column)
    row_key, column_key = counts.stratum * width_row + counts.row, counts.stratum * width + counts.column
    cell_key = row_key * width + counts.column
    cells, cell = distinct(cell_key, n_strata * width_row * width)
    rows, row = distinct(row_key, n_strata * width_row)
    columns, column = distinct(column_key, n_strata * width)
    total, by_row = sum_at(counts.stratum, counts.n, n_strata), sum_at(row, counts.n, len(rows))
    by_column, o = sum_at(column, counts.n, len(columns)), sum_at(cell, counts.n, len(cells))
    at_row = np.searchsorted(rows, cells // width)
    stratum = rows[at_row] // width_row
    at_column = np.searchsorted(columns, stratum * width + cells % width)
    e = by_row[at_row] * by_column[at_column] / total[stratum]
    seen_rows = np.bincount(rows // width_row, minlength=n_strata)
    seen_columns = np.bincount(columns // width, minlength=n_strata)

    def squares(place: IntArray, over: FloatArray, of: IntArray) -> FloatArray:
        """Return, by stratum, the sum over buckets of squared counts over what they are counted against."""
        pairs, pair = distinct(counts.bucket * len(over) + place, _size(counts.bucket) * len(over))
        held = sum_at(pair, counts.n, len(pairs))
        at = pairs % len(over)
        return sum_at(of[at], held**2 / over[at], n_strata)

    spread = (
        squares(cell, e, stratum)
        - squares(row, by_row, rows // width_row)
        - squares(column, by_column, columns // width)
        + squares(counts.stratum, total, np.arange(n_strata))
    )
    df = (np.maximum(seen_rows, 1) - 1) * (np.maximum(seen_columns, 1) - 1)
    x2 = sum_at(stratum, o**2 / e, n_strata) - total
    g2 = 2.0 * sum_at(stratum, o * np.log(o / e), n_strata)
    free = df > 0
    return TableTests(
        x2=np.where(free, np.maximum(x2, 0.0), 0.0),
        g2=np.where(free, np.maximum(g2, 0.0), 0.0),
        df=df,
        n=total,
        spread=np.where(free, np.maximum(spread, 0.0), 0.0),
    )


@dataclass(frozen=True)
class Departure:
    """The cell that departs most from what is expected of it.

    Attributes
    ----------
    stratum, row, column : int
        Which.
    share, expected : float
        Of the moves of its row and of those of its stratum, those that go to its column.
    n : float
        Moves of its row.
    z : float
        Its standardised residual, without its sign.
    """

    stratum: int
    row: int
    column: int
    share: float
    expected: float
    n: float
    z: float


def departures(counts: Counts, least: float = 5.0) -> list[Departure | None]:
    """Return, for each stratum, the cell with the largest standardised residual.

    Cells in which nothing was counted are among them. None where of no cell `least` moves are expected.

    References
    ----------
    S. J. Haberman, The analysis of residuals in cross-classified tables, Biometrics 29 (1973) 205-220.
    """
    if not len(counts.n):
        return []
    order = np.argsort(counts.stratum, kind="stable")
    first = np.searchsorted(counts.stratum[order], np.arange(int(counts.stratum.max()) + 2))
    return [_departure(counts, order[first[i] : first[i + 1]], i, least) for i in range(len(first) - 1)]


def _departure(counts: Counts, mine: IntArray, stratum: int, least: float) -> Departure | None:
    rows, row = np.unique(counts.row[mine], return_inverse=True)
    columns, column = np.unique(counts.column[mine], return_inverse=True)
    if len(rows) < 2 or len(columns) < 2:
        return None
    size = (len(rows), len(columns))
    o = sum_at(row * size[1] + column, counts.n[mine], size[0] * size[1]).reshape(size)
    by_row, by_column, total = o.sum(axis=1, keepdims=True), o.sum(axis=0), o.sum()
    e = by_row * by_column / total
    spread = e * (1.0 - by_row / total) * (1.0 - by_column / total)
    z = np.where(e >= least, np.abs(o - e) / np.sqrt(spread), 0.0)
    i, j = np.unravel_index(int(z.argmax()), size)
    if not z[i, j] > 0:
        return None
    n, expected = float(by_row[i, 0]), float(by_column[j] / total)
    return Departure(stratum, int(rows[i]), int(columns[j]), float(o[i, j] / n), expected, n, float(z[i, j]))


def largest_departure(found: list[Departure | None]) -> Departure | None:
    """Return the one with the largest residual of all; None where there is none."""
    return max((one for one in found if one is not None), key=lambda one: one.z, default=None)


def nominal_df(n_strata: int, n_rows: int, n_columns: int) -> int:
    """Return the degrees of freedom of full tables, every cell of which could be filled."""
    return n_strata * (n_rows - 1) * (n_columns - 1)


def chi_square_p(statistic: npt.ArrayLike, df: npt.ArrayLike) -> FloatArray:
    """Return the chance of a larger value of the chi square distribution; NaN where `df` is 0.

    Examples
    --------
    >>> chi_square_p([3.841, 1.0], [1, 0]).round(3).tolist()
    [0.05, nan]
    """
    from scipy.special import chdtrc

    x, freedom = np.asarray(statistic, np.float64), np.asarray(df, np.float64)
    return np.where(freedom > 0, chdtrc(np.where(freedom > 0, freedom, 1.0), x), np.nan)


@dataclass(frozen=True, eq=False)
class Histories:
    """Moves by what went before them.

    Attributes
    ----------
    bucket : int array, shape (n_lines,)
    states : int array, shape (n_lines, order)
        The last states before the move, the present one last.
    column : int array, shape (n_lines,)
        The next state.
    n : float array, shape (n_lines,)
    """

    bucket: IntArray
    states: IntArray
    column: IntArray
    n: FloatArray

    @property
    def order(self) -> int:
        """How many states are known before each move."""
        return int(self.states.shape[1])

    def counts(self, order: int) -> tuple[Counts, IntArray]:
        """Return the counts that set `order` states of memory against one state less.

        Returns
        -------
        Counts
            Strata: the last `order` - 1 states; rows: the one before them.
        strata : array, shape (n_strata, order - 1)
            The states of each stratum.
        """
        last = self.states[:, self.order - order + 1 :]
        stratum, n_strata = np.zeros(len(self.n), np.int64), 1
        strata = np.zeros((min(len(self.n), 1), 0), self.states.dtype)
        for states in last.T:
            size = _size(states)
            found, stratum = distinct(stratum * size + states, n_strata * size)
            strata, n_strata = np.column_stack([strata[found // size], (found % size).astype(states.dtype)]), len(found)
        row = self.states[:, self.order - order].astype(np.int64)
        return Counts(self.bucket, stratum, row, self.column, self.n), strata


def information(histories: Histories, tests: list[TableTests]) -> FloatArray:
    """Return Bayes' information criterion of the orders 0, 1, ..., the smaller the better.

    Parameters
    ----------
    histories : Histories
        The moves.
    tests : list of TableTests
        All strata together, of order 0 against 1, 1 against 2 and so on.

    Returns
    -------
    float array, shape (len(tests) + 1,)

    Notes
    -----
    -2 log likelihood + free probabilities x log(moves); each order has as many more of these as its test has degrees
    of freedom. Moves are taken as independent, which those of one customer are not: for information only.

    References
    ----------
    G. Schwarz, Estimating the dimension of a model, Ann. Statist. 6 (1978) 461-464. R. W. Katz, On some criteria for
    estimating the order of a Markov chain, Technometrics 23 (1981) 243-249.
    """
    by_column = np.bincount(histories.column, weights=histories.n)
    by_column = by_column[by_column > 0]
    n = float(by_column.sum())
    first = -2.0 * float((by_column * np.log(by_column / n)).sum()) + (len(by_column) - 1) * np.log(n)
    steps = [float(one.df.sum()) * np.log(n) - float(one.g2.sum()) for one in tests]
    return np.cumsum([first, *steps])


def _ratio(top: npt.ArrayLike, below: npt.ArrayLike) -> FloatArray:
    x, y = np.asarray(top, np.float64), np.asarray(below, np.float64)
    return np.asarray(np.divide(x, y, out=np.full(x.shape, np.nan), where=y > 0), np.float64)


def _size(code: IntArray) -> int:
    return int(code.max()) + 1 if len(code) else 1
