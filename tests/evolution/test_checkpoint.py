"""A restored search goes on bit for bit; a checkpoint holds no pickles and is replaced as a whole."""

import numpy as np
import pytest

from optisize.evolution.checkpoint import from_arrays, load, save, to_arrays
from optisize.evolution.genetic import run, step

from .problems import begin, bnh, coarse, dtlz2, hopeless, same


@pytest.mark.parametrize(
    ("evaluate", "dimensions", "goals"),
    [(dtlz2(3), 7, 3), (dtlz2(4), 6, 4), (dtlz2(2), 5, 1 + 1), (bnh, 2, 2), (hopeless, 3, 2), (coarse(3, 1), 2, 1)],
)
@pytest.mark.parametrize("stop", [1, 2, 13])
def test_a_restored_search_goes_on_bit_for_bit(tmp_path, evaluate, dimensions, goals, stop):
    settings = {"population": 24, "generations": 30, "seed": 5, "patience": 25}
    whole = run(begin(evaluate, dimensions, goals, **settings), evaluate)

    def interrupt(state):
        if state.generation == stop:
            raise KeyboardInterrupt

    state = begin(evaluate, dimensions, goals, **settings)
    if stop > 1:
        state = run(state, evaluate, on_generation=interrupt)
    save(tmp_path / "checkpoint.npz", state)
    restored = load(tmp_path / "checkpoint.npz")
    assert same(state, restored)
    assert restored.records == state.records
    end = run(restored, evaluate)
    assert same(end, whole)
    assert end.history == whole.history
    np.testing.assert_array_equal(end.front.losses, whole.front.losses)
    np.testing.assert_array_equal(end.front.vectors, whole.front.vectors)


def test_arrays_hold_numbers_and_text_only(tmp_path):
    state = begin(bnh, 2, 2, population=10)
    assert {array.dtype.kind for array in to_arrays(state).values()} <= set("fiU")
    save(tmp_path / "a.npz", state)
    with np.load(tmp_path / "a.npz", allow_pickle=False) as file:
        assert set(file.files) == set(to_arrays(state))


def test_other_arrays_beside_those_of_the_search_are_ignored():
    state = begin(bnh, 2, 2, population=10)
    assert same(from_arrays(to_arrays(state) | {"note": np.array("mine")}), state)


def test_arrays_of_another_kind_are_refused():
    with pytest.raises(ValueError, match="not a checkpoint"):
        from_arrays({"front": np.zeros(3)})
    arrays = to_arrays(begin(bnh, 2, 2, population=10)) | {"format": np.array(99)}
    with pytest.raises(ValueError, match="not a checkpoint"):
        from_arrays(arrays)


def test_a_failed_save_leaves_the_old_checkpoint_and_nothing_else(tmp_path, monkeypatch):
    path = tmp_path / "checkpoint.npz"
    first = begin(bnh, 2, 2, population=10)
    save(path, first)

    def full(file, **arrays):
        file.write(b"half")
        raise OSError("disk full")

    monkeypatch.setattr(np, "savez", full)
    with pytest.raises(OSError, match="disk full"):
        save(path, step(first, bnh))
    assert same(load(path), first)
    assert [entry.name for entry in tmp_path.iterdir()] == ["checkpoint.npz"]
