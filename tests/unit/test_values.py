"""Value objects: frozen, equal by contents, through JSON and pickle unchanged, misspelt names named."""

import pickle

import attrs
import numpy as np
import pytest

from branchlab.errors import InputError
from branchlab.values import ValueObject, read_only, value


@value
class Probe(ValueObject):
    """A value object with an array and a nested one."""

    size: float
    samples: np.ndarray = attrs.field(default=(1.0, 2.0), converter=read_only)
    inner: ValueObject | None = attrs.field(default=None, kw_only=True)


def test_change_makes_a_new_object():
    first = Probe(2.0)
    second = first.with_(size=3.0)
    assert (first.size, second.size) == (2.0, 3.0)
    with pytest.raises(attrs.exceptions.FrozenInstanceError):
        first.size = 4.0


def test_arrays_are_read_only_copies():
    mine = np.array([1.0, 2.0])
    probe = Probe(1.0, mine)
    mine[0] = 9.0
    assert probe.samples[0] == 1.0
    with pytest.raises(ValueError, match="read-only"):
        probe.samples[0] = 5.0


def test_equal_by_contents_and_hashable():
    assert Probe(1.0, [3.0, 4.0]) == Probe(1.0, [3.0, 4.0])
    assert Probe(1.0, [3.0, 4.0]) != Probe(1.0, [3.0, 5.0])
    assert len({Probe(1.0), Probe(1.0), Probe(2.0)}) == 2


def test_json_round_trip_is_exact(rng):
    probe = Probe(0.1 + 0.2, rng.normal(size=7), inner=Probe(1.0))
    again = ValueObject.from_json(probe.to_json())
    assert again == probe
    assert np.array_equal(again.samples, probe.samples)
    assert Probe.from_json(probe.to_json()) == probe


def test_pickle_holds_arguments_only():
    probe = Probe(1.0, np.arange(3.0))
    probe.__dict__["cached"] = np.zeros(10**6)
    assert len(pickle.dumps(probe)) < 2000
    assert pickle.loads(pickle.dumps(probe)) == probe


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Probe(1.0, sample=3), "has no argument 'sample'.*Did you mean 'samples'"),
        (lambda: Probe(), "missing a required argument: 'size'; it takes size, samples, inner"),
        (lambda: ValueObject.from_json("{"), "not JSON"),
        (lambda: ValueObject.from_json('{"size": 1}'), "expected an object with a 'type'"),
        (lambda: ValueObject.from_json('{"type": "Prob"}'), "Did you mean 'Probe'"),
        (lambda: ValueObject.from_json('{"type": "Probe", "size": 1, "siz": 2}'), "Did you mean 'size'"),
    ],
)
def test_slips_are_named(make, message):
    with pytest.raises(InputError, match=message):
        make()


def test_reprs_show_shapes_not_data():
    probe = Probe(1.0, np.zeros(100_000), inner=Probe(2.0))
    assert "array of shape (100000,)" in repr(probe)
    assert "<script>" not in Probe(1.0, inner=None).with_(size="<script>")._repr_html_()
    for name in ("size", "samples", "inner"):
        assert name in repr(probe)
        assert name in probe._repr_html_()
