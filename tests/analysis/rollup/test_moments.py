"""Moments of groups and their merge, against certified values (NIST StRD, see SOURCES.md)."""

import numpy as np
import pytest

from analysis.rollup.groups import Groups, one_group
from analysis.rollup.moments import group_moments, merged_moments
from tests.reference.values import reference, references

SETS = [row for row in references("T11-strd") if "data" in row["inputs"]]


@pytest.mark.parametrize("row", SETS, ids=lambda row: row["id"])
@pytest.mark.parametrize("chunk", [1, 7, 10**9])
def test_parts_give_the_certified_mean_and_deviation(row, chunk):
    values = np.array(row["inputs"]["data"], float)
    parts = Groups(np.arange(0, len(values), chunk), len(values))
    moments = group_moments(values, np.ones(len(values), bool), parts)
    count, mean, m2 = merged_moments(*moments, one_group(len(parts.first)))
    assert count[0] == row["inputs"]["n"]
    rtol = max(row["tolerance"]["value"], 1e-11)
    np.testing.assert_allclose([mean[0], np.sqrt(m2[0] / (count[0] - 1))], [row["expected"]["mean"], row["expected"]["sd"]],
                               rtol=rtol)


def test_merge_of_two_and_with_an_empty_part():
    """T. F. Chan, G. H. Golub, R. J. LeVeque (1983): the worked merge, and the empty part as neutral."""
    for name in ("T11-merge-01", "T11-empty"):
        row = reference(name)
        parts = [np.array([row["inputs"][part][key] for part in "AB"]) for key in ("n", "mean", "M2")]
        found = [value[0] for value in merged_moments(*parts, one_group(2))]
        np.testing.assert_allclose(found, [row["expected"][key] for key in ("n", "mean", "M2")], rtol=1e-13)
