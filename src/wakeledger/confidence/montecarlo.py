"""Propagation of distributions (JCGM 101:2008) through any callable, in batches and threads."""

from __future__ import annotations

import contextvars
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor, as_completed

import numpy as np

from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler, Seed
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array

Evaluate = Callable[[dict[str, Array]], Array]
Progress = Callable[[int, int], None]


def run(
    evaluate: Evaluate,
    sources: Sequence[Source],
    layouts: Mapping[str, InputLayout],
    *,
    names: Sequence[str],
    draws: int,
    seed: Seed,
    batch: int = 16,
    workers: int = 2,
    progress: Progress | None = None,
) -> Samples:
    """Evaluate a callable under errors drawn from all sources together.

    Parameters
    ----------
    evaluate : callable
        Takes additive errors by input name, arrays of shape (k, n) or (k,) in SI for every input of the layouts, and
        gives the outputs, shape (k, m). NaN says that a draw has no value. It is called from several threads at once.
        An input that no source acts on comes as read-only zeros that take no memory (all strides zero).
    sources : sequence of Source
        The sources.
    layouts : mapping of str to InputLayout
        The inputs by name.
    names : sequence of str
        Names of the m outputs.
    draws : int
        Number of draws M.
    seed : int or sequence of int
        Seed of the survey (`ErrorSampler`). Draw k has the same errors whatever M, `batch` and `workers` are.
    batch : int
        Draws per call.
    workers : int
        Number of threads.
    progress : callable, optional
        Called in the caller's thread with the draws done and M after each batch.

    Returns
    -------
    Samples

    Raises
    ------
    SurveyError
        If a source cannot act on these inputs.
    ValueError
        If `draws`, `batch` or `workers` is too small, or the callable gives another shape.
    """
    if draws < 2 or batch < 1 or workers < 1:
        raise ValueError(f"draws = {draws}, batch = {batch}, workers = {workers}; at least 2, 1 and 1 are needed")
    sampler = ErrorSampler(sources, layouts, seed=seed)
    return Samples(tuple(names), sample(evaluate, sampler.draw, len(names), draws, batch, workers, progress))


def sample(
    evaluate: Evaluate,
    draw: Callable[[int, int], dict[str, Array]],
    outputs: int,
    draws: int,
    batch: int,
    workers: int,
    progress: Progress | None,
) -> Array:
    """Values of a callable for errors that another callable draws.

    Parameters
    ----------
    evaluate : callable
        As in `run`.
    draw : callable
        Gives the errors of the draws from `start` to `stop`.
    outputs : int
        Number of outputs m.
    draws, batch, workers, progress
        As in `run`.

    Returns
    -------
    ndarray, shape (draws, m)

    Raises
    ------
    ValueError
        If the callable gives another shape than (k, m).
    """
    values = np.empty((draws, outputs))

    def task(start: int, stop: int) -> int:
        result = np.asarray(evaluate(draw(start, stop)), dtype=float)
        if result.shape != (stop - start, outputs):
            raise ValueError(f"the callable gave shape {result.shape}; {(stop - start, outputs)} is needed")
        values[start:stop] = result
        return stop - start

    pool = ThreadPoolExecutor(workers)
    try:
        # A copy of the context per task carries the caller's numpy error state into the threads.
        pending = [
            pool.submit(contextvars.copy_context().run, task, start, min(start + batch, draws))
            for start in range(0, draws, batch)
        ]
        done = 0
        for future in as_completed(pending):
            done += future.result()
            if progress is not None:
                progress(done, draws)
    finally:
        pool.shutdown(wait=True, cancel_futures=True)
    return values
