"""What can go wrong: one base error that says what, where and what to do."""


class SsauditError(Exception):
    """A problem that the user can mend, told in one line.

    Parameters
    ----------
    what : str
        What is wrong.
    where : str, optional
        The file, and the place in it (a dataset, a key, a row, a point).
    do : str, optional
        What the user can do about it.

    Examples
    --------
    >>> print(SsauditError("sign is missing", where="loop.toml", do='add sign = "negative"'))
    loop.toml: sign is missing; add sign = "negative"
    """

    def __init__(self, what: str, *, where: str = "", do: str = "") -> None:
        self.what = what
        self.where = where
        self.do = do
        line = (f"{where}: " if where else "") + what + (f"; {do}" if do else "")
        # Names from files may hold what would steer a terminal.
        line = "".join(c if c.isprintable() else "\ufffd" for c in " ".join(line.split()))
        super().__init__(line)


class SourceError(SsauditError):
    """An export that cannot be read."""


class BankError(SsauditError):
    """A bank that cannot be read, written or used."""


class LoopError(SsauditError):
    """A loop or gain table that does not fit itself or the bank."""


class CriteriaError(SsauditError):
    """Criteria that cannot be judged by."""


class LedgerError(SsauditError):
    """A ledger that cannot be read or written."""


class PipelineError(SsauditError):
    """A pipeline file that cannot be run."""
