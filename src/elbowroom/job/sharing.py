"""Runs that share a store: each unit is solved by one of them, the others do something else and fetch it later."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager

from elbowroom.store.records import Record, Store

LOOK_AGAIN_SECONDS = 0.5
"""Between two looks at a unit that another run works on."""

Waiting = Callable[[str, float], None]
"""Told what is waited for, and a fraction done, which is not known and always 0."""


@contextmanager
def working_on(store: Store, key: str, waiting: Waiting | None = None) -> Iterator[Record | None]:
    """Claim a unit for the block, or wait until it is there because another run has solved it.

    A run that ends without storing its unit, however it ends, is taken over.

    Parameters
    ----------
    store : Store
        The store.
    key : str
        Key of the unit.
    waiting : callable, optional
        Told again and again while another run works on it.

    Yields
    ------
    Record or None
        What another run has stored, or None: then the unit is this run's to solve and to store inside the block.

    Raises
    ------
    StoreError
        If the store cannot be read or written.
    """
    while True:
        record = store.get(key)
        if record is not None:
            yield record
            return
        claim = store.claim(key)
        if claim is not None:
            with claim:
                # another run may have finished between the two
                yield store.get(key)
            return
        holder = store.claimed(key)
        if waiting is not None and holder is not None:
            waiting(f"waiting for {holder}", 0.0)
        time.sleep(LOOK_AGAIN_SECONDS)


def worked_elsewhere(store: Store, keys: Sequence[str]) -> bool:
    """Return whether another run works on one of some units now; those in the store need no work, claimed or not.

    Raises
    ------
    StoreError
        If the store cannot be read.
    """
    return any(key not in store and store.claimed(key) is not None for key in keys)
