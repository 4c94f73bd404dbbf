from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.stats import randomisation

# Also by the ten rounds of the paper written out in whole numbers, the counter starting from 1.
GOLDEN = ["ee5c598428d36487", "906c0a5cf81623ef", "922aaf50223edca5"]


def test_words_of_a_purpose_never_change() -> None:
    assert randomisation.SCHEME == "philox4x64-ndtri/1"
    words = randomisation.word_source("golden").random_raw(3)
    assert [f"{word:016x}" for word in words] == GOLDEN


def test_uniforms_lie_inside_the_unit_interval_whatever_the_word() -> None:
    ends = randomisation.uniforms(np.array([0, 2**64 - 1], dtype=np.uint64))
    np.testing.assert_array_equal(ends, [2.0**-54, 1.0 - 2.0**-54])


@pytest.mark.parametrize(("n", "p"), [(1, 1), (12, 5)])
def test_normal_batches_do_not_depend_on_how_they_are_cut(n: int, p: int, monkeypatch: pytest.MonkeyPatch) -> None:
    [whole] = randomisation.normal_batches("cut", n, p, 50)
    monkeypatch.setattr(randomisation, "_CHUNK_NUMBERS", 7 * n * p)
    chunks = list(randomisation.normal_batches("cut", n, p, 50))
    assert [chunk.shape for chunk in chunks] == [(7, n, p)] * 7 + [(1, n, p)]
    np.testing.assert_array_equal(np.concatenate(chunks), whole)


def test_fewer_batches_are_the_first_of_more() -> None:
    [few], [many] = randomisation.normal_batches("more", 4, 2, 5), randomisation.normal_batches("more", 4, 2, 9)
    np.testing.assert_array_equal(few, many[:5])


def test_another_purpose_gives_other_numbers() -> None:
    [one], [other] = randomisation.normal_batches("one", 4, 2, 5), randomisation.normal_batches("other", 4, 2, 5)
    assert not np.isin(one, other).any()


def test_normal_batches_are_standard_normal() -> None:
    [batch] = randomisation.normal_batches("normal", 50, 4, 500)
    assert stats.kstest(batch.ravel(), "norm").pvalue > 0.001
    assert abs(np.corrcoef(batch.reshape(-1, 4), rowvar=False) - np.eye(4)).max() < 4 / np.sqrt(25_000)


def test_sign_patterns_are_signs_in_even_shares() -> None:
    signs = randomisation.sign_patterns("signs", 12, 1000)
    assert signs.shape == (1000, 12)
    assert set(signs.ravel()) == {-1.0, 1.0}
    assert stats.binomtest(int((signs > 0).sum()), signs.size).pvalue > 0.001
