"""TwoCopyShots: regions and joint outcomes against a plain count, refusals, merging and the digest."""

import hashlib
import itertools
import pickle
from dataclasses import FrozenInstanceError

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from entropest.errors import ArgumentTypeError, ArgumentValueError
from entropest.records import DiagramCounts, TwoCopyShots

shots_of_sites = arrays(np.uint8, st.tuples(st.integers(1, 150), st.integers(1, 6)), elements=st.integers(0, 1))


def plain_odd(singlets, sites):
    """Say of each shot, one by one, whether the region holds an odd number of singlets."""
    return [sum(int(shot[site]) for site in sites) % 2 == 1 for shot in singlets]


def all_regions(sites):
    return [region for size in range(1, sites + 1) for region in itertools.combinations(range(sites), size)]


@given(shots_of_sites)
def test_every_region_agrees_with_a_plain_count(singlets):
    record = TwoCopyShots(singlets)
    assert (record.shots, record.sites) == singlets.shape
    assert (record.singlets == (singlets == 1)).all()
    wanted = all_regions(record.sites)
    counted = record.regions(wanted)
    assert list(counted) == wanted
    for region in wanted:
        odd = sum(plain_odd(singlets, region))
        expected = DiagramCounts.from_swap(symmetric=record.shots - odd, antisymmetric=odd, dim=2 ** len(region))
        assert record.region(region) == counted[region] == expected


@given(shots_of_sites, st.data())
def test_joint_outcomes_agree_with_a_plain_count(singlets, data):
    record = TwoCopyShots(singlets)
    region = st.lists(st.integers(0, record.sites - 1), min_size=1, unique=True)
    first, second = data.draw(region), data.draw(region)
    pairs = list(zip(plain_odd(singlets, first), plain_odd(singlets, second), strict=True))
    joint = record.joint(first, second)
    assert joint.both_even == pairs.count((False, False))
    assert joint.only_first_odd == pairs.count((True, False))
    assert joint.only_second_odd == pairs.count((False, True))
    assert joint.both_odd == pairs.count((True, True))
    assert joint.shots == record.shots
    assert (joint.first, joint.second) == (tuple(first), tuple(second))
    with pytest.raises(FrozenInstanceError):
        joint.both_odd = 0


def test_the_mean_sign_is_the_purity_of_each_region():
    """Shots of (Bell pair) x (maximally mixed qubit), drawn with the exact law of the singlet outcomes.

    Purities: 1/2 for a half of the pair, 1 for the pair, 1/2 for the third qubit. Tolerance 5 standard errors:
    a false alarm has probability below 6e-7 for each of the 7 regions.
    """
    rng = np.random.default_rng(3)
    shots = 40_000
    pair = rng.random(shots) < 0.25  # both halves antisymmetric together, else both symmetric
    single = rng.random(shots) < 0.25
    record = TwoCopyShots(np.stack([pair, pair, single], axis=1))
    purity = {(0,): 0.5, (1,): 0.5, (2,): 0.5, (0, 1): 1.0, (0, 2): 0.25, (1, 2): 0.25, (0, 1, 2): 0.5}
    for region, counts in record.regions(purity).items():
        tally = {str(diagram): count for diagram, count in counts.items()}
        mean = (tally.get("2", 0) - tally.get("1+1", 0)) / shots
        assert abs(mean - purity[region]) <= 5 * np.sqrt((1 - purity[region] ** 2) / shots)


def test_rejected_shots_are_left_out_of_all_counts():
    singlets = [[1, 0], [0, 0], [1, 1], [1, 0]]
    record = TwoCopyShots(singlets, accepted=[1, 0, 1, 0], rejected=5)
    assert (record.shots, record.rejected) == (2, 7)
    assert record == TwoCopyShots([[1, 0], [1, 1]], rejected=7)
    assert record.region([1]) == DiagramCounts({"2": 1, "1+1": 1}, dim=2)
    assert record.joint([0], [1]).shots == 2


def test_the_dimension_of_a_region_is_unknown_beyond_the_limit():
    record = TwoCopyShots(np.zeros((3, 60), dtype=bool))
    assert record.region(range(53)).dim == 2**53
    assert record.region(range(54)).dim is None
    assert TwoCopyShots([[1, 0]], site_dim=3).region([1, 0]).dim == 9


@pytest.mark.parametrize(
    ("singlets", "message"),
    [
        ([[0, 2]], "singlets must be 0 or 1, got 2"),
        ([[0, -1]], "singlets must be 0 or 1, got -1"),
        ([[0.5, 1]], "singlets must be 0 or 1, got 0.5"),
        ([[np.nan, 1]], "singlets must be 0 or 1, got nan"),
        ([0, 1], r"must be a \(shots, sites\) array, got shape \(2,\)"),
        ([[0, 1], [0]], "rectangular"),
        (np.zeros((3, 0)), "at least one site"),
        (np.zeros((0, 3)), "at least one accepted shot"),
    ],
)
def test_wrong_shots_are_refused(singlets, message):
    with pytest.raises(ArgumentValueError, match=message):
        TwoCopyShots(singlets)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"accepted": [1]}, "one value for each of the 2 shots"),
        ({"accepted": [1, 2]}, "accepted must be 0 or 1, got 2"),
        ({"accepted": [0, 0]}, r"at least one accepted shot \(2 were rejected\)"),
        ({"rejected": -1}, "rejected must be at least 0, got -1"),
        ({"site_dim": 1}, "site_dim must be at least 2, got 1"),
    ],
)
def test_wrong_options_are_refused(options, message):
    with pytest.raises(ArgumentValueError, match=message):
        TwoCopyShots([[0, 1], [1, 1]], **options)


def test_words_are_refused_as_shots():
    with pytest.raises(ArgumentTypeError, match="array of 0 and 1, got dtype <U1"):
        TwoCopyShots([["0", "1"]])


@pytest.mark.parametrize(
    ("sites", "message"),
    [
        ([], "region must hold at least one site"),
        ([0, 3], "site of region must be at most 2, got 3"),
        ([-1], "site of region must be at least 0, got -1"),
        ([0, 2, 0], "region must hold each site at most once, got site 0 twice"),
        ([0.5], "site of region must be a whole number, got 0.5"),
    ],
)
def test_wrong_regions_are_refused(sites, message):
    record = TwoCopyShots([[0, 1, 1]])
    with pytest.raises(ArgumentValueError, match=message):
        record.region(sites)
    with pytest.raises(ArgumentValueError, match=message):
        record.regions([[0], sites])
    with pytest.raises(ArgumentValueError, match=message.replace("region", "second")):
        record.joint([0], sites)


@pytest.mark.parametrize("sites", [0, "01", None, [True]])
def test_regions_of_the_wrong_type_are_refused(sites):
    with pytest.raises(ArgumentTypeError, match="region must be"):
        TwoCopyShots([[0, 1, 1]]).region(sites)


@given(shots_of_sites, st.integers(1, 149))
def test_merging_puts_shots_one_after_the_other(singlets, cut):
    if cut >= len(singlets):
        return
    whole = TwoCopyShots(singlets, rejected=5)
    parts = TwoCopyShots(singlets[:cut], rejected=2) + TwoCopyShots(singlets[cut:], rejected=3)
    assert parts == whole
    assert hash(parts) == hash(whole)
    assert parts.digest == whole.digest


def test_merging_needs_the_same_sites():
    record = TwoCopyShots([[0, 1]])
    with pytest.raises(ArgumentValueError, match=r"the same sites and site_dim, got 2 sites .* and 3 of"):
        record + TwoCopyShots([[0, 1, 1]])
    with pytest.raises(ArgumentValueError, match="dimension 2 and 2 of dimension 3"):
        record + TwoCopyShots([[0, 1]], site_dim=3)
    with pytest.raises(TypeError):
        record + DiagramCounts({"2": 1})


@given(shots_of_sites)
def test_the_digest_can_be_made_by_hand(singlets):
    record = TwoCopyShots(singlets, site_dim=3, rejected=4)
    lines = ["# site_dim: 3", "# rejected: 4", ",".join(f"site{i}" for i in range(record.sites))]
    lines += [",".join(str(int(bit)) for bit in shot) for shot in singlets]
    text = "".join(line + "\n" for line in lines)
    assert record.digest == "sha256:" + hashlib.sha256(text.encode()).hexdigest()


def test_the_canonical_text_of_many_shots_is_made_in_pieces():
    singlets = np.random.default_rng(4).integers(0, 2, size=(70_001, 3))
    pieces = list(TwoCopyShots(singlets).canonical_csv())
    lines = "".join(pieces).splitlines()[2:]
    assert len(pieces) == 4
    assert lines == [",".join(map(str, shot)) for shot in singlets.tolist()]


def test_records_differ_in_order_of_shots_rejections_and_site_dimension():
    record = TwoCopyShots([[0, 1], [1, 1]])
    others = [
        TwoCopyShots([[1, 1], [0, 1]]),
        TwoCopyShots([[0, 1], [1, 1]], rejected=1),
        TwoCopyShots([[0, 1], [1, 1]], site_dim=3),
        TwoCopyShots([[0, 1], [1, 1], [0, 0]]),
    ]
    assert all(record != other and record.digest != other.digest for other in others)
    assert record != "record"


def test_a_record_cannot_be_changed_and_survives_pickling():
    record = TwoCopyShots([[0, 1], [1, 1]], site_dim=3, rejected=2)
    with pytest.raises(AttributeError, match="immutable"):
        record.rejected = 0
    with pytest.raises(AttributeError, match="immutable"):
        del record._shots
    record.singlets[0, 0] = True
    assert not record.singlets[0, 0]
    assert pickle.loads(pickle.dumps(record)) == record


def test_a_record_prints_in_a_few_lines():
    record = TwoCopyShots([[0, 1], [1, 1], [0, 0], [0, 1]], accepted=[1, 1, 1, 0])
    assert repr(record) == "<TwoCopyShots: 3 shots (1 rejected) of 2 sites of dimension 2>"
    assert str(record) == (
        "3 accepted shots (1 rejected) of 2 sites of dimension 2\n  singlets per shot, site by site: 0.333, 0.667"
    )
    assert len(str(TwoCopyShots(np.zeros((1, 500), dtype=bool)))) < 250
