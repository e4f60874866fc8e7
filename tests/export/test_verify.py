"""A port's outputs against the vectors: what agrees, what differs first, what cannot be compared."""

import numpy as np
import pytest

from learnfilter.core.errors import InputError
from learnfilter.export.check import read_vectors, reproduced
from learnfilter.export.verify import FIELDS, WITHIN, read_outputs, verify

# Four rows of which three are weighed; two heaviest poses a step, one whole belief after the second.
VECTORS = {
    "weighed": np.array([True, False, True, True]),
    "pose": np.array([[1.0, 2, 3.14], [1.1, 2, 3.14], [1.2, 2, -3.14], [1.3, 2, 0]]),
    "covariance": np.tile(np.diag([0.04, 0.01, 0.0]), (4, 1, 1)),
    "mass": np.array([0.1, 0.1, 0.5, 0.9]),
    "entropy": np.array([5.0, 5.0, 3.0, 1.0]),
    "log_evidence": np.array([0.0, 0.0, 2.0, -np.inf]),
    "state": np.array([0, 0, 0, 1], np.uint8),
    "surprise": np.array([np.nan, np.nan, 0.5, 0.6]),
    "top_belief": np.array([[0.2, 0.1], [0.4, 0.3], [0.8, 0.1]], np.float32),
    "top_pose": np.zeros((3, 2), np.int32),
    "belief": np.full((1, 2, 2, 2), 0.125, np.float32),
    "belief_step": np.array([1]),
}


def outputs(**changed) -> dict[str, np.ndarray]:
    """What a port that is right would give, but for some fields."""
    right = {name: VECTORS[name].copy() for name in FIELDS}
    return {**right, **changed}


def with_value(name: str, place: tuple[int, ...], value: float) -> dict[str, np.ndarray]:
    changed = VECTORS[name].astype(float)
    changed[place] = value
    return outputs(**{name: changed})


def test_a_right_port_agrees_in_every_field():
    """NaN with NaN, infinity with infinity; nothing is missing."""
    compared = verify(VECTORS, outputs(), 1e-3)
    assert compared.first is None and compared.missing == ()
    assert compared.largest == dict.fromkeys(FIELDS, 0.0)


@pytest.mark.parametrize(
    ("name", "at", "value", "row", "place", "apart"),
    [
        ("weighed", (1,), 1, 1, "weighed", 1.0),
        ("state", (3,), 2, 3, "state", 1.0),
        ("log_evidence", (2,), 2.25, 2, "log_evidence", 0.25),
        ("log_evidence", (3,), 2.0, 3, "log_evidence", np.inf),
        ("surprise", (0,), 0.5, 0, "surprise", np.inf),
        ("surprise", (2,), np.nan, 2, "surprise", np.inf),
        ("mass", (1,), 0.2, 1, "mass", 0.1),
        ("entropy", (0,), 4.5, 0, "entropy", 0.5),
        ("pose", (3, 1), 2.5, 3, "pose[1]", 0.5),
        ("pose", (2, 2), 3.14, 2, "pose[2]", 2 * np.pi - 6.28),  # across the seam
        ("covariance", (1, 0, 1), 0.01, 1, "covariance[0, 1]", 0.5),  # of 0.2 m times 0.1 m
        ("covariance", (1, 2, 2), 0.0025, 1, "covariance[2, 2]", 1.0),  # of 0.05 rad, squared
        ("top_belief", (1, 1), 0.1, 2, "top_belief[1]", 0.1),  # half of 0.2; the second step is row 2
        ("belief", (0, 1, 0, 1), 0.625, 2, "belief[1, 0, 1]", 0.25),
    ],
)
def test_a_difference_is_placed_and_measured(name, at, value, row, place, apart):
    """In the field's unit, at its row of the vectors, with the number that is farthest off."""
    compared = verify(VECTORS, with_value(name, at, value), 1e-3)
    assert compared.first is not None
    assert (compared.first.row, compared.first.place) == (row, place)
    assert compared.first.apart == pytest.approx(apart, abs=1e-7)  # float32 beliefs
    assert compared.largest[name] == compared.first.apart


def test_both_numbers_are_shown():
    """States by their names."""
    first = verify(VECTORS, with_value("state", (3,), 2), 1e-3).first
    assert (first.expected, first.got) == ("locked", "lost")
    first = verify(VECTORS, with_value("pose", (3, 0), 7.25), 1e-3).first
    assert (first.expected, first.got) == ("1.3", "7.25")


def test_the_earliest_row_comes_first():
    """Whatever the field."""
    both = outputs(
        weighed=with_value("weighed", (3,), 0)["weighed"],
        surprise=with_value("surprise", (2,), 0)["surprise"],
    )
    assert verify(VECTORS, both, 1e-3).first[:2] == (2, "surprise")


def test_in_one_row_the_cause_comes_before_the_effect():
    """Evidence before belief before the pose that is read off it."""
    both = outputs(
        pose=with_value("pose", (2, 0), 9)["pose"],
        log_evidence=with_value("log_evidence", (2,), 9)["log_evidence"],
    )
    assert verify(VECTORS, both, 1e-3).first.place == "log_evidence"


@pytest.mark.parametrize(("within", "agrees"), [(0.011, True), (0.009, False)])
def test_the_tolerance_is_the_callers(within, agrees):
    """A centimetre off."""
    assert (verify(VECTORS, with_value("pose", (0, 0), 1.01), within).first is None) == agrees


def test_fields_that_are_not_given_are_listed():
    """And not compared."""
    compared = verify(VECTORS, {"pose": VECTORS["pose"]}, 1e-3)
    assert set(compared.missing) == FIELDS.keys() - {"pose"} and compared.largest.keys() == {"pose"}


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ({}, "nothing to compare; expected weighed or log_evidence"),
        ({"poses": np.zeros(4)}, "poses: unknown field; expected weighed or"),
        ({"pose": np.zeros((3, 3))}, r"pose: wrong shape; expected \[4, 3\], got \[3, 3\]"),
        ({"belief": np.zeros((2, 2, 2))}, r"belief: wrong shape; expected \[1, 2, 2, 2\]"),
        ({"state": np.array(["locked"] * 4)}, "state: not numbers"),
        ({"mass": np.zeros(4, complex)}, "mass: not numbers"),
    ],
)
def test_what_cannot_be_compared_is_refused(given, message):
    """Named, with what was expected."""
    with pytest.raises(InputError, match=f"port.npz.*{message}"):
        verify(VECTORS, given, 1e-3, "port.npz")


def test_a_summary_holds_no_infinity():
    """JSON has none."""
    plain = verify(VECTORS, with_value("surprise", (0,), 0.5), 1e-3).plain()
    assert plain["first"]["apart"] is None and plain["largest"]["surprise"] is None
    assert plain["largest"]["pose"] == 0.0


@pytest.mark.parametrize("content", [b"", b"PK\x03\x04 cut", b"text", b"\x93NUMPY\x01\x00"])
def test_a_file_that_is_none_is_refused(tmp_path, content):
    """Empty, cut, something else."""
    (tmp_path / "port.npz").write_bytes(content)
    with pytest.raises(InputError, match=r"port\.npz: unreadable arrays"):
        read_outputs(tmp_path / "port.npz")


def test_one_bare_array_is_refused(tmp_path):
    """Which field would it be?"""
    np.save(tmp_path / "port.npy", np.zeros(3))
    with pytest.raises(InputError, match=r"port\.npy: unreadable arrays"):
        read_outputs(tmp_path / "port.npy")


def test_pickled_objects_are_refused(tmp_path):
    """They could run code."""
    np.savez(tmp_path / "port.npz", pose=np.array([{}], dtype=object))
    with pytest.raises(InputError, match="unreadable arrays"):
        read_outputs(tmp_path / "port.npz")


def test_a_missing_file_is_named(tmp_path):
    """One clear line."""
    with pytest.raises(InputError, match=r"port\.npz: cannot be read"):
        read_outputs(tmp_path / "port.npz")


@pytest.mark.parametrize(
    ("kind", "precision"),
    [("beam+colour", "fp32"), ("matcher", "fp32"), ("matcher", "fp16"), ("matcher", "int8")],
)
def test_our_own_runtime_passes(shipped, kind, precision):
    """Every field, at the tolerance of the bundle's precision."""
    folder = shipped(kind, precision)
    compared = verify(read_vectors(folder), reproduced(folder), WITHIN[precision])
    assert compared.first is None and compared.missing == ()
