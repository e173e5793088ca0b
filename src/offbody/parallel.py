"""Threads over chunks of targets: the kernels release the interpreter's lock.

Each call starts its own threads and joins them, so that a forked child inherits nothing that could
hang. A target's sum runs in the same order whatever chunk it falls in: results do not depend on the
number of threads.
"""

import itertools
import os
import threading

from offbody.checks import as_count

CHUNK = 1024            # targets; a multiple of the kernels' block
WORTH_A_THREAD = 2e5    # pairs below which starting a thread costs more than it saves

_chosen = None


def threads(count=None):
    """The number of threads that offbody's own sums use; sets it first if ``count`` is given.

    Without a choice it is ``OMP_NUM_THREADS`` if that is set, and never more than the processors
    that this process may run on. LAPACK's threads are set by its own library.

    Parameters
    ----------
    count : int, optional
        Threads from now on, at least 1.

    Raises
    ------
    InputError
        If count is not a whole number of at least 1.

    Examples
    --------
    >>> import offbody as ob
    >>> ob.threads(1)
    1
    """
    global _chosen
    if count is not None:
        _chosen = as_count("count", count, least=1)
    return _chosen or _available()


def _available():
    allowed = (
        len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    )
    wish = os.environ.get("OMP_NUM_THREADS", "").split(",")[0].strip()
    return max(1, min(allowed, int(wish))) if wish.isdigit() and int(wish) else allowed


def over_chunks(work, targets, sources):
    """Call ``work(slice)`` for slices that cover ``targets`` items, on as many threads as pay."""
    workers = min(threads(), -(-targets // CHUNK), int(targets * sources / WORTH_A_THREAD) + 1)
    if workers <= 1:
        work(slice(0, targets))
        return
    counter = itertools.count()
    failures = []

    def take_chunks():
        try:
            while (first := next(counter) * CHUNK) < targets and not failures:
                work(slice(first, min(first + CHUNK, targets)))
        except BaseException as error:  # handed to the caller's thread below
            failures.append(error)

    helpers = [threading.Thread(target=take_chunks, daemon=True) for _ in range(workers - 1)]
    for helper in helpers:
        helper.start()
    take_chunks()
    for helper in helpers:
        helper.join()
    if failures:
        raise failures[0]
