"""Exact null laws by Monte Carlo: one table for each (n, p), made once and the same for ever.

Statistics of whitened units do not change under affine maps, so under
normality their law depends on (n, p) alone; so does that of a covariance beside
a known one.  Textbook large-sample laws fail at laboratory sizes; up to 200
units p-values come from these tables.

References
----------
.. [1] M. Dwass, "Modified randomization tests for nonparametric hypotheses",
   Annals of Mathematical Statistics 28 (1957) 181-187: ``(1 + #)/(draws + 1)``
   is a valid p-value whatever the number of draws.
"""

from __future__ import annotations

import hashlib
import json
import math
import threading
from collections import OrderedDict
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.errors import VerificationError
from service.stats import deletion, dispersion, normality, ordering
from service.stats.arrays import Matrix, Vector
from service.stats.randomisation import SCHEME, normal_batches

DRAWS = 20_000
"""Simulated batches behind each table."""

MOST_UNITS = 200
"""Beyond this many units the corrected large-sample laws are used."""

STATISTICS: tuple[Callable[[Matrix], Mapping[str, Vector]], ...] = (
    normality.mardia_of_many,
    normality.henze_zirkler_of_many,
    deletion.sequential_maxima,
    ordering.of_many,
)
"""Functions from whitened batches, shape (b, n, p), to statistics by name, each of shape (b,)."""

STATISTICS_OF_DRAWS: tuple[Callable[[Matrix], Mapping[str, Vector]], ...] = (dispersion.statistics_of_many,)
"""The same of standard normal batches as they are drawn, for statistics beside a known covariance."""

EDITION = "1"
"""Edition of the statistics and their rounding; a change of any definition changes it, and so every key."""

_MAGIC = b"acceptance null table\n"
_KEPT = 64
_BITS = 2.0**40
# Gram matrices of one step together stay in a processor's cache.
_STEP_NUMBERS = 1 << 17


def rounded(values: npt.ArrayLike) -> Vector:
    """Return values to 40 significant bits, about 12 digits, by arithmetic that is exact."""
    mantissas, exponents = np.frexp(np.asarray(values, dtype=np.float64))
    return np.asarray(np.ldexp(np.rint(mantissas * _BITS), exponents - 40))


def _rounded(value: float) -> float:
    mantissa, exponent = math.frexp(value)
    return math.ldexp(round(mantissa * _BITS), exponent - 40)


@dataclass(frozen=True, slots=True, eq=False)
class NullTable:
    """Simulated null laws of every registered statistic at one (n, p).

    Parameters
    ----------
    n, p : int
        Units and characteristics.
    values : mapping of str to ndarray, shape (draws,)
        Sorted values, `rounded`.  Observed values are rounded alike before they are compared, so
        that the last bits of another linear algebra library rarely change a p-value.
    """

    n: int
    p: int
    values: Mapping[str, Vector]

    @property
    def draws(self) -> int:
        """Number of simulated batches."""
        return next(iter(self.values.values())).size

    def upper(self, name: str, observed: float) -> float:
        """Return ``(1 + #{values >= observed}) / (draws + 1)``."""
        values = self.values[name]
        above = values.size - int(values.searchsorted(_rounded(observed), side="left"))
        return (1 + above) / (values.size + 1)

    def two_sided(self, name: str, observed: float) -> float:
        """Return twice the smaller tail, at most 1."""
        values = self.values[name]
        below = int(values.searchsorted(_rounded(observed), side="right"))
        return min(1.0, 2 * min(self.upper(name, observed), (1 + below) / (values.size + 1)))

    def critical_value(self, name: str, level: float) -> float:
        """Return the value beyond which, and not at which, the upper p-value is at most `level`.

        Below a level of ``1/(draws + 1)``, which no p-value reaches, it is the largest value.
        """
        values = self.values[name]
        rank = math.floor(level * (values.size + 1) + 1e-9)
        return float(values[values.size - max(rank, 1)])

    def to_bytes(self) -> bytes:
        """Return the table as bytes: a mark, a digest, a header of one line, little-endian doubles."""
        names = sorted(self.values)
        header = json.dumps(_header(self.n, self.p, self.draws, names), sort_keys=True).encode()
        body = header + b"\n" + b"".join(self.values[name].astype("<f8").tobytes() for name in names)
        return _MAGIC + hashlib.sha256(body).digest() + body

    @classmethod
    def from_bytes(cls, data: bytes) -> NullTable:
        """Read a table back.

        Raises
        ------
        VerificationError
            Where the bytes are damaged, or were made by another scheme or edition.
        """
        start = len(_MAGIC) + 32
        digest, body = data[len(_MAGIC) : start], data[start:]
        if not data.startswith(_MAGIC) or hashlib.sha256(body).digest() != digest:
            raise _refusal("is damaged")
        line, _, numbers = body.partition(b"\n")
        header = json.loads(line)
        names, draws = header["names"], header["draws"]
        if header != _header(header["n"], header["p"], draws, names):
            raise _refusal("was made by another scheme")
        rows = np.frombuffer(numbers, dtype="<f8").reshape(len(names), draws)
        values = {name: row.astype(np.float64) for name, row in zip(names, rows, strict=True)}
        return cls(header["n"], header["p"], values)


def _header(n: int, p: int, draws: int, names: list[str]) -> dict[str, object]:
    return {"n": n, "p": p, "draws": draws, "scheme": SCHEME, "edition": EDITION, "names": names}


def _refusal(how: str) -> VerificationError:
    return VerificationError(f"A stored table of null laws {how}. Delete the store's copy; it will be made anew.")


def make_table(n: int, p: int) -> NullTable:
    """Simulate the null laws at (n, p).

    Parameters
    ----------
    n, p : int
        Units, at least 2, and characteristics.

    Returns
    -------
    NullTable
        The same on every call; working memory stays near 20 MB up to 200 units and 20 characteristics.
    """
    parts: dict[str, list[Vector]] = {}
    for batches in _steps(n, p):
        for name, values in _statistics(batches):
            parts.setdefault(name, []).append(values)
    return NullTable(n, p, {name: np.sort(rounded(np.concatenate(steps))) for name, steps in parts.items()})


def _steps(n: int, p: int) -> Iterator[Matrix]:
    size = max(1, _STEP_NUMBERS // (n * max(n, p)))
    for batches in normal_batches(f"affine-invariant statistics, n={n}, p={p}", n, p, DRAWS):
        for start in range(0, batches.shape[0], size):
            yield batches[start : start + size]


def _statistics(batches: Matrix) -> Iterator[tuple[str, Vector]]:
    """Yield every statistic that exists at this (n, p), by name."""
    n, p = batches.shape[1:]
    for statistics in STATISTICS_OF_DRAWS:
        yield from statistics(batches).items()
    if n > p + 1:
        whitened = _whitened(batches)
        for statistics in STATISTICS:
            yield from statistics(whitened).items()


def _whitened(batches: Matrix) -> Matrix:
    """Return each batch centred and whitened with its own sample covariance, divisor n - 1."""
    centred = batches - batches.mean(axis=1, keepdims=True)
    scatter = centred.transpose(0, 2, 1) @ centred / (batches.shape[1] - 1)
    factor = np.linalg.cholesky(scatter)
    return np.ascontiguousarray(np.linalg.solve(factor, centred.transpose(0, 2, 1)).transpose(0, 2, 1))


def key_of(n: int, p: int) -> str:
    """Return the name under which the table of (n, p) is kept; it changes with the set of statistics."""
    functions = STATISTICS + STATISTICS_OF_DRAWS
    making = ",".join(f"{function.__module__}.{function.__name__}" for function in functions)
    return f"{SCHEME}:{EDITION}:{DRAWS}:{hashlib.sha256(making.encode()).hexdigest()[:12]}:{n}:{p}"


class NullLaws:
    """Provider of tables: made once, kept in memory, and where given in a store.

    Threads may share one provider; a table that is being made holds up only those who ask for it.

    Parameters
    ----------
    load : callable, optional
        Returns the bytes kept under a key, or None.
    save : callable, optional
        Keeps bytes under a key.
    """

    def __init__(
        self,
        load: Callable[[str], bytes | None] = lambda _: None,
        save: Callable[[str, bytes], None] = lambda _, __: None,
    ) -> None:
        self._load, self._save = load, save
        self._tables: OrderedDict[tuple[int, int], NullTable] = OrderedDict()
        self._making: dict[tuple[int, int], threading.Lock] = {}
        self._lock = threading.Lock()

    def get(self, n: int, p: int) -> NullTable | None:
        """Return the table of (n, p), making it at the first asking; None beyond 200 units or for one unit.

        Raises
        ------
        VerificationError
            Where the store's copy is damaged or foreign.
        """
        if n > MOST_UNITS or n < 2:
            return None
        found = self._recall(n, p)
        if found is not None:
            return found
        with self._lock:
            making = self._making.setdefault((n, p), threading.Lock())
        with making:
            # Another thread may have made it while this one waited.
            return self._recall(n, p) or self._remember(self._made(n, p))

    def _recall(self, n: int, p: int) -> NullTable | None:
        with self._lock:
            found = self._tables.get((n, p))
            if found is not None:
                self._tables.move_to_end((n, p))
            return found

    def _remember(self, table: NullTable) -> NullTable:
        with self._lock:
            self._tables[table.n, table.p] = table
            if len(self._tables) > _KEPT:
                self._tables.popitem(last=False)
            self._making.pop((table.n, table.p), None)
        return table

    def _made(self, n: int, p: int) -> NullTable:
        key = key_of(n, p)
        kept = self._load(key)
        if kept is None:
            table = make_table(n, p)
            self._save(key, table.to_bytes())
            return table
        table = NullTable.from_bytes(kept)
        if (table.n, table.p) != (n, p):
            raise _refusal("stands under the name of another")
        return table
