"""The errors that sordino raises on purpose."""


class SordinoError(Exception):
    """Base of every error raised on purpose."""


class InputError(SordinoError, ValueError):
    """Something the caller can mend: facts, a guarantee, a table, a file, an option."""


class NotYetError(InputError):
    """Asked for something that this version does not do."""


class BudgetError(InputError):
    """More than a budget book has left."""
