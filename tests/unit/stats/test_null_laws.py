from __future__ import annotations

import hashlib
import threading

import numpy as np
import pytest
from scipy import stats as scipy_stats

from service.errors import VerificationError
from service.stats import null_laws
from service.stats.null_laws import NullLaws, NullTable, key_of, make_table, rounded
from service.stats.randomisation import SCHEME, uniforms, word_source

TABLE = make_table(8, 3)
NAMES = ("henze-zirkler", "mardia-kurtosis", "mardia-skewness", "order-dependence", "within-maximum")
WORDS = ["da6e19d5a056aee9", "aefa5ccfb59b40cf", "d9097555d78f1885"]
UNIFORMS = ["0x1.b4dc33ab40ad6p-1", "0x1.5df4b99f6b368p-1", "0x1.b212eaabaf1e4p-1"]
DIGEST = "d19b0699c0e5f7c18fbbe36febab8d257139e3f3459a19faf7dfca725bb8f483"


def _small() -> NullTable:
    return NullTable(8, 3, {"a": np.array([1.0, 2.0, 2.0, 3.0])})


def test_first_words_and_uniforms_never_change() -> None:
    words = word_source("affine-invariant statistics, n=8, p=3").random_raw(3)
    assert SCHEME == "philox4x64-ndtri/1"
    assert [f"{word:016x}" for word in words.tolist()] == WORDS
    assert [value.hex() for value in uniforms(words).tolist()] == UNIFORMS


def test_a_table_has_the_same_digits_on_every_machine() -> None:
    digest = hashlib.sha256()
    for name in NAMES:
        # Twenty bits: no last-bit difference of a linear algebra library comes near the next value.
        mantissas, exponents = np.frexp(TABLE.values[name])
        digest.update(name.encode() + np.ldexp(np.rint(mantissas * 2.0**20), exponents).astype("<f8").tobytes())
    assert digest.hexdigest() == DIGEST


def test_every_registered_statistic_is_in_a_table() -> None:
    assert set(NAMES) <= set(TABLE.values)
    for values in TABLE.values.values():
        assert values.shape == (null_laws.DRAWS,)
        assert (np.diff(values) >= 0).all()


@pytest.mark.parametrize(
    ("observed", "p_value"), [(0.5, 5 / 5), (1.0, 5 / 5), (2.0, 4 / 5), (2.5, 2 / 5), (4.0, 1 / 5)]
)
def test_upper_p_value_counts_the_observed_batch_and_ties(observed: float, p_value: float) -> None:
    assert _small().upper("a", observed) == p_value


@pytest.mark.parametrize(("observed", "p_value"), [(0.5, 2 / 5), (1.0, 4 / 5), (2.0, 1.0), (4.0, 2 / 5)])
def test_two_sided_p_value_is_twice_the_smaller_tail_and_at_most_one(observed: float, p_value: float) -> None:
    assert _small().two_sided("a", observed) == p_value


@pytest.mark.parametrize("level", [0.001, 0.01, 0.05, 0.5])
def test_a_value_is_significant_just_beyond_the_critical_value(level: float) -> None:
    critical = TABLE.critical_value("henze-zirkler", level)
    assert TABLE.upper("henze-zirkler", critical) > level
    assert TABLE.upper("henze-zirkler", critical * (1 + 1e-11)) <= level


def test_last_bits_do_not_change_a_p_value() -> None:
    values = TABLE.values["mardia-skewness"]
    for value in values[:: values.size // 7].tolist():
        assert TABLE.upper("mardia-skewness", value * (1 + 4e-16)) == TABLE.upper("mardia-skewness", value)


def test_rounding_keeps_forty_bits_of_either_sign_and_zero() -> None:
    values = np.array([1 / 3, -1e-300, 0.0, 123456.789])
    kept = rounded(values)
    assert kept == pytest.approx(values, rel=2.0**-40)
    assert (rounded(kept) == kept).all()
    assert [null_laws._rounded(value) for value in values.tolist()] == kept.tolist()


def test_within_maximum_agrees_with_the_beta_law_where_the_bound_is_exact() -> None:
    # Far out, two units cannot both exceed the same distance, and n times one tail is exact.
    n, p = 8, 3
    far = (n - 1) ** 2 / n * scipy_stats.beta.isf(0.05 / n, p / 2, (n - p - 1) / 2)
    assert abs(TABLE.upper("within-maximum", far) - 0.05) < 4 * np.sqrt(0.05 * 0.95 / null_laws.DRAWS)


def test_bytes_read_back_to_the_same_table() -> None:
    again = NullTable.from_bytes(TABLE.to_bytes())
    assert (again.n, again.p, again.draws) == (8, 3, null_laws.DRAWS)
    assert again.to_bytes() == TABLE.to_bytes()
    assert all((again.values[name] == values).all() for name, values in TABLE.values.items())


@pytest.mark.parametrize("place", [0, 30, 100, -1])
def test_one_changed_byte_is_refused(place: int) -> None:
    data = bytearray(_small().to_bytes())
    data[place] ^= 1
    with pytest.raises(VerificationError, match="is damaged"):
        NullTable.from_bytes(bytes(data))


@pytest.mark.parametrize("data", [b"", b"acceptance null table\n", _small().to_bytes()[:-8]])
def test_a_cut_table_is_refused(data: bytes) -> None:
    with pytest.raises(VerificationError, match="is damaged"):
        NullTable.from_bytes(data)


def test_a_table_of_another_edition_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    data = _small().to_bytes()
    monkeypatch.setattr(null_laws, "EDITION", "another")
    with pytest.raises(VerificationError, match="another scheme"):
        NullTable.from_bytes(data)


@pytest.mark.parametrize(("n", "p"), [(201, 2), (1, 1), (1, 5)])
def test_there_is_no_table_beyond_two_hundred_units_or_of_one(n: int, p: int) -> None:
    assert NullLaws().get(n, p) is None


@pytest.mark.parametrize(("n", "p"), [(6, 5), (3, 5), (2, 1)])
def test_where_whitened_units_say_nothing_a_table_has_no_law_of_them(n: int, p: int) -> None:
    table = NullLaws().get(n, p)
    assert table is not None
    assert not set(NAMES) & set(table.values)


def test_a_table_is_kept_in_the_store_and_taken_from_it() -> None:
    kept: dict[str, bytes] = {}
    first = NullLaws(load=kept.get, save=kept.__setitem__).get(4, 1)
    assert first is not None
    assert kept == {key_of(4, 1): first.to_bytes()}
    again = NullLaws(load=kept.get, save=_unwanted).get(4, 1)
    assert again is not None
    assert again.to_bytes() == first.to_bytes()


def _unwanted(key: str, data: bytes) -> None:
    raise AssertionError(f"made again: {key}, {len(data)} bytes")


def test_a_table_under_the_name_of_another_is_refused() -> None:
    with pytest.raises(VerificationError, match="name of another"):
        NullLaws(load=lambda _: _small().to_bytes()).get(9, 3)


def test_many_threads_make_a_table_once() -> None:
    saved: list[str] = []
    laws, found = NullLaws(save=lambda key, _: saved.append(key)), []
    threads = [threading.Thread(target=lambda: found.append(laws.get(5, 2))) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert saved == [key_of(5, 2)]
    assert len({id(table) for table in found}) == 1


def test_making_one_table_does_not_hold_up_another() -> None:
    made, release = threading.Event(), threading.Event()

    def save(key: str, _: bytes) -> None:
        if key == key_of(5, 2):
            made.set()
            release.wait(30)

    laws = NullLaws(save=save)
    slow = threading.Thread(target=laws.get, args=(5, 2))
    slow.start()
    assert made.wait(30)
    assert laws.get(4, 1) is not None
    release.set()
    slow.join()


def test_the_table_used_longest_ago_is_forgotten_first(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(null_laws, "_KEPT", 2)
    made: list[str] = []
    laws = NullLaws(load=made.append, save=lambda *_: None)
    for size in [(4, 1), (5, 1), (4, 1), (6, 1), (4, 1), (5, 1)]:
        laws.get(*size)
    assert made == [key_of(4, 1), key_of(5, 1), key_of(6, 1), key_of(5, 1)]


def test_a_maker_that_fails_leaves_the_next_caller_free() -> None:
    def full(key: str, data: bytes) -> None:
        raise OSError(f"no room for {key}, {len(data)} bytes")

    laws = NullLaws(save=full)
    for _ in range(2):
        with pytest.raises(OSError, match="no room"):
            laws.get(4, 1)
