"""Exact null laws by Monte Carlo: one table for each (n, p), made once and the same for ever.

Statistics of whitened units do not change under affine maps, so under
normality their law depends on (n, p) alone; so does that of a covariance beside
a known one.  Textbook large-sample laws fail
at laboratory sizes; up to 200 units p-values come from these tables.
"""

from __future__ import annotations

import hashlib
import json
import threading
from collections import OrderedDict
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from service.errors import VerificationError
from service.stats import deletion, dispersion, normality
from service.stats.arrays import Matrix, Vector
from service.stats.randomisation import SCHEME, normal_batches

DRAWS = 20_000
"""Simulated batches behind each table."""

MOST_UNITS = 200
"""Beyond this many units the corrected large-sample laws are used."""

_MAGIC = b"acceptance null table 1\n"
_KEPT = 64

STATISTICS: tuple[Callable[[Matrix], Mapping[str, Vector]], ...] = (
    normality.mardia_of_many,
    normality.henze_zirkler_of_many,
    deletion.sequential_maxima,
)
"""Functions from whitened batches, shape (b, n, p), to statistics by name, each of shape (b,)."""

STATISTICS_OF_DRAWS: tuple[Callable[[Matrix], Mapping[str, Vector]], ...] = (dispersion.statistics_of_many,)
"""The same of standard normal batches as they are drawn, for statistics beside a known covariance."""


@dataclass(frozen=True, slots=True, eq=False)
class NullTable:
    """Simulated null laws of every registered statistic at one (n, p).

    Parameters
    ----------
    n, p : int
        Units and characteristics.
    values : mapping of str to ndarray, shape (DRAWS,)
        Sorted values, rounded to 12 significant digits.
    """

    n: int
    p: int
    values: Mapping[str, Vector]

    def upper(self, name: str, observed: float) -> float:
        """Return ``(1 + #{values >= observed}) / (draws + 1)``."""
        values = self.values[name]
        above = values.size - int(np.searchsorted(values, rounded(observed), side="left"))
        return (1 + above) / (values.size + 1)

    def two_sided(self, name: str, observed: float) -> float:
        """Return twice the smaller tail, at most 1."""
        values = self.values[name]
        below = int(np.searchsorted(values, rounded(observed), side="right"))
        return min(1.0, 2 * min(self.upper(name, observed), (1 + below) / (values.size + 1)))

    def critical_value(self, name: str, level: float) -> float:
        """Return the largest value whose upper p-value exceeds `level`: beyond it a value is significant."""
        values = self.values[name]
        rank = int(np.floor(level * (values.size + 1) + 1e-9))
        return float(values[values.size - max(rank, 1)])

    def to_bytes(self) -> bytes:
        """Return the table as bytes, with a header and a digest."""
        names = sorted(self.values)
        header = {"n": self.n, "p": self.p, "draws": DRAWS, "scheme": SCHEME, "names": names}
        body = (
            json.dumps(header).encode() + b"\n" + b"".join(self.values[name].astype("<f8").tobytes() for name in names)
        )
        return _MAGIC + hashlib.sha256(body).digest() + body

    @classmethod
    def from_bytes(cls, data: bytes) -> NullTable:
        """Read a table back.

        Raises
        ------
        VerificationError
            Where the bytes are damaged or of another making.
        """
        digest, body = data[len(_MAGIC) : len(_MAGIC) + 32], data[len(_MAGIC) + 32 :]
        if not data.startswith(_MAGIC) or hashlib.sha256(body).digest() != digest:
            raise VerificationError("A stored table of null laws is damaged. Delete the store's copy to make it anew.")
        line, _, numbers = body.partition(b"\n")
        header = json.loads(line)
        columns = np.frombuffer(numbers, dtype="<f8").reshape(len(header["names"]), header["draws"])
        values = {name: column.astype(np.float64) for name, column in zip(header["names"], columns, strict=True)}
        return cls(header["n"], header["p"], values)


def rounded(values: Vector | float) -> Vector:
    """Return values to 12 significant digits, so that the last bits of another BLAS do not show."""
    array = np.asarray(values, dtype=np.float64)
    with np.errstate(divide="ignore"):
        exponent = np.where(array == 0, 0.0, np.floor(np.log10(np.abs(array))))
    scale = 10.0 ** (11 - exponent)
    return np.asarray(np.round(array * scale) / scale)


def make_table(n: int, p: int) -> NullTable:
    """Simulate the null laws at (n, p)."""
    parts: dict[str, list[Vector]] = {}
    for batches in normal_batches(f"affine-invariant statistics, n={n}, p={p}", n, p, DRAWS):
        for name, values in _statistics(batches):
            parts.setdefault(name, []).append(values)
    return NullTable(n, p, {name: np.sort(rounded(np.concatenate(chunks))) for name, chunks in parts.items()})


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
    return np.linalg.solve(factor, centred.transpose(0, 2, 1)).transpose(0, 2, 1)


def key_of(n: int, p: int) -> str:
    """Return the name under which the table of (n, p) is kept; it changes with the set of statistics."""
    making = ",".join(function.__name__ for function in STATISTICS + STATISTICS_OF_DRAWS)
    return f"{SCHEME}:{DRAWS}:{hashlib.sha256(making.encode()).hexdigest()[:12]}:{n}:{p}"


class NullLaws:
    """Provider of tables: made once, kept in memory, and where given in a store.

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
        self._lock = threading.Lock()

    def get(self, n: int, p: int) -> NullTable | None:
        """Return the table of (n, p), making it at the first asking; None beyond 200 units or for one unit."""
        if n > MOST_UNITS or n < 2:
            return None
        found = self._tables.get((n, p))
        if found is not None:
            return found
        with self._lock:
            if (n, p) not in self._tables:
                self._tables[n, p] = self._made(n, p)
                while len(self._tables) > _KEPT:
                    self._tables.popitem(last=False)
            return self._tables[n, p]

    def _made(self, n: int, p: int) -> NullTable:
        key = key_of(n, p)
        kept = self._load(key)
        if kept is not None:
            return NullTable.from_bytes(kept)
        table = make_table(n, p)
        self._save(key, table.to_bytes())
        return table
