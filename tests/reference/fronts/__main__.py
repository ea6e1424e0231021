"""Remakes the stored best fronts; takes some minutes."""

from __future__ import annotations

import json
import sys
from concurrent.futures import ProcessPoolExecutor

import moocore
import numpy as np

from optisize.evolution.archive import Front
from optisize.front.explore import search, settings_of
from tests.reference.fronts import HERE, PROBLEMS, SEEDS, TIMES, problem


def archive(name: str, seed: int) -> np.ndarray:
    """Return the losses of the archive of one long run, (M, N)."""
    loaded = problem(name)
    generations = loaded.settings.generations * TIMES
    run = search(loaded, threads=1, settings=settings_of(loaded, seed=seed, generations=generations, patience=0))
    assert run.state is not None
    print(name, seed, run.info["seconds"], run.info["archive"], file=sys.stderr, flush=True)
    return run.state.front.losses


def main() -> None:
    """Run all and store what the tests need."""
    for name in sys.argv[1:] or PROBLEMS:
        with ProcessPoolExecutor(2) as pool:
            archives = list(pool.map(archive, [name] * len(SEEDS), SEEDS))
        rows = np.ascontiguousarray(np.concatenate(archives, axis=1).T)
        union = rows[moocore.is_nondominated(rows)].T
        best, worst = union.min(axis=1), union.max(axis=1)
        worst = worst + 0.1 * (worst - best)
        front = Front(np.empty((1, union.shape[1])), union)
        data = {
            "problem": name,
            "sha256": dict(problem(name).hashes),
            "goals": [g.measure.name for g in problem(name).goals],
            "best": best.tolist(),
            "worst": worst.tolist(),
            "hypervolume": front.hypervolume(best, worst),
            "designs": union.shape[1],
            "single_runs": [Front(front.vectors, a).hypervolume(best, worst) for a in archives],
        }
        (HERE / f"{name}.json").write_text(json.dumps(data, indent=2) + "\n")


if __name__ == "__main__":
    main()
