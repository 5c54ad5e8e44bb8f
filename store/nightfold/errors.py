"""Every error that nightfold raises on purpose.

::

    NightfoldError
    ├── RecordError        (ValueError)         a shot record cannot be taken
    ├── CardError          (ValueError)         a machine card cannot be used
    ├── UnitError          (ValueError)         a unit is unknown or does not convert
    ├── FormulaError       (ValueError)         an expression of the card cannot be used
    ├── MergeError         (ValueError)         two machines cannot be merged as they are
    ├── FitError           (ValueError)         a fit was asked for that cannot be done
    ├── RequestError       (ValueError)         a request says too little, or what does not go together
    ├── ChoiceNeeded       (ValueError)         the request fits several things; name one
    ├── NotFound           (LookupError)        no such scan, shot, machine, parameter, model
    │   └── NoReference                         no reference shots near enough, or fit to be divided by
    └── StoreError                              the store itself
        ├── StoreMissing   (FileNotFoundError)  there is no store at that place
        ├── StoreExists    (FileExistsError)    there is one already
        ├── NotAStore      (ValueError)         the file is something else
        ├── StoreReadOnly  (PermissionError)    it, or its folder, cannot be written
        ├── StoreBusy      (TimeoutError)       another writer held it too long
        ├── StoreOutdated                       it needs `nightfold upgrade`
        └── StoreTooNew                         it was written by a newer nightfold

Messages say what failed, on which object, what was found, what was wanted and, where it helps, what to do next.
"""


class NightfoldError(Exception):
    """Base class of every error that nightfold raises on purpose."""


class RecordError(NightfoldError, ValueError):
    """A shot record that cannot be taken.

    Attributes
    ----------
    field : str
        Where in the record, as a dotted path (``parameters.coil_current.unit``); empty for the whole line.
    found : str
        What stood there, shortened.
    wanted : str
        What would have been accepted.
    """

    def __init__(self, field: str, found: str, wanted: str) -> None:
        self.field, self.found, self.wanted = field, found, wanted
        place = f"{field}: " if field else ""
        super().__init__(f"{place}found {found}, wanted {wanted}")


class CardError(NightfoldError, ValueError):
    """A machine card that cannot be used; the message names file, key, value found and value wanted."""


class MergeError(NightfoldError, ValueError):
    """Two machines that cannot be merged as they are; nothing was changed.

    Attributes
    ----------
    reasons : tuple of str
        All that speaks against it.
    """

    def __init__(self, old: str, into: str, reasons: list[str]) -> None:
        self.reasons = tuple(reasons)
        super().__init__("\n".join(f"{old} into {into}: {reason}" for reason in self.reasons))


class UnitError(NightfoldError, ValueError):
    """A unit that is not known, or that does not convert into the one wanted."""


class FormulaError(NightfoldError, ValueError):
    """An expression that cannot be used.

    Attributes
    ----------
    found, wanted : str
        What stood there, and what would have been accepted.
    """

    def __init__(self, found: str, wanted: str) -> None:
        self.found, self.wanted = found, wanted
        super().__init__(f"found {found}, wanted {wanted}")


class FitError(NightfoldError, ValueError):
    """A fit that cannot be done as asked (a fit that merely does not converge is a result with a warning)."""


class ChoiceNeeded(NightfoldError, ValueError):
    """The request fits several things; the message lists them."""


class RequestError(NightfoldError, ValueError):
    """A request that says too little, or what does not go together."""


class NotFound(NightfoldError, LookupError):
    """No such scan, shot, machine, parameter, observable or model; the message lists near misses."""


class NoReference(NotFound):
    """No reference shots that a scan can be related to; the message says what is missing, and how far they are."""


class StoreError(NightfoldError):
    """Something is wrong with the store itself."""


class StoreMissing(StoreError, FileNotFoundError):
    """There is no store, or no folder for one, at the place named."""


class StoreExists(StoreError, FileExistsError):
    """A new store was asked for where there is one already."""


class NotAStore(StoreError, ValueError):
    """The file or database is not a nightfold store."""


class StoreReadOnly(StoreError, PermissionError):
    """The store, or its folder, cannot be written."""


class StoreBusy(StoreError, TimeoutError):
    """Another writer held the store longer than we were ready to wait."""


class StoreOutdated(StoreError):
    """The store was written by an older nightfold and needs ``nightfold upgrade``."""


class StoreTooNew(StoreError):
    """The store was written by a newer nightfold than this one."""
