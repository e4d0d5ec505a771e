"""Results kept by content: :func:`content_key`, :class:`Hdf5Store`, and :class:`MemoryStore`, its twin.

A store is told at construction what its records look like (:class:`Schema`); it knows no physics.
"""

from elbowroom.store.claims import Claim as Claim
from elbowroom.store.claims import Holder as Holder
from elbowroom.store.hdf5 import Hdf5Store as Hdf5Store
from elbowroom.store.keys import content_key as content_key
from elbowroom.store.memory import MemoryStore as MemoryStore
from elbowroom.store.records import DamageReport as DamageReport
from elbowroom.store.records import Record as Record
from elbowroom.store.records import Schema as Schema
from elbowroom.store.records import Store as Store
from elbowroom.store.records import StoreDamageWarning as StoreDamageWarning
from elbowroom.store.unitfile import read_unit_file as read_unit_file
