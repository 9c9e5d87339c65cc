"""The store of nights: every refresh that was published, whole, and which one is in force.

`Store.open` is the way in. A night is written aside (`unfinished`), synced (`disk`), and put in force by one rename
(`store`); readers hold a `Night`. `sql` lets all nights be asked at once, `comparison` sets two beside each other,
`thinning` says which are kept, and `hand_over` writes files for an inventory system.
"""

from legworth.store.history import HistoryEntry
from legworth.store.manifest import Check, FileEntry, Forced, Manifest, PartEntry
from legworth.store.night import Night
from legworth.store.store import Store
from legworth.store.thinning import Thinning
from legworth.store.unfinished import UnfinishedNight
from network.errors import NightDamagedError, StoreBusyError, StoreError

__all__ = [
    "Check",
    "FileEntry",
    "Forced",
    "HistoryEntry",
    "Manifest",
    "Night",
    "NightDamagedError",
    "PartEntry",
    "Store",
    "StoreBusyError",
    "StoreError",
    "Thinning",
    "UnfinishedNight",
]
