"""What went wrong, in one clear line with an exit status."""

from __future__ import annotations

import errno
import logging
import sqlite3
from typing import Any

from service.context import COULD_NOT_FINISH, WRONG_USAGE, CommandError

_LOG = logging.getLogger("yellowbay")

_FULL = (errno.ENOSPC, errno.EDQUOT)


def explain(error: BaseException) -> tuple[str, int]:
    """One line for people, and the exit status.

    An error that nobody foresaw is logged with its trace when the log is verbose, and named.
    """
    from config.errors import ConfigurationError

    if isinstance(error, CommandError):
        return f"yellowbay: {error}", error.status
    if isinstance(error, ConfigurationError):
        lines = [str(mistake) for mistake in error.mistakes]
        return "\n".join(lines), WRONG_USAGE
    text = _known(error)
    if text is None:
        _LOG.info("trace of the failure", exc_info=error)
        text = (
            f"unexpected {type(error).__name__}: {_first_line(error)} "
            "(run with --verbose for the trace)"
        )
    return f"yellowbay: {text}", COULD_NOT_FINISH


def _known(error: BaseException) -> str | None:
    from ingest.drops import DropFolderError
    from service.lock import BusyError
    from spc.monitoring.life import NotPossibleError
    from spc.records.findings import UnknownExcursionError
    from spc.records.schema import NewerSchemaError

    plain = (NotPossibleError, UnknownExcursionError, NewerSchemaError, BusyError, DropFolderError)
    if isinstance(error, plain):
        return str(error).strip("'\"")
    if isinstance(error, OSError):
        return _of_system(error)
    return _of_database(error)


def _of_system(error: OSError) -> str:
    where = f" {error.filename}" if error.filename else ""
    if error.errno in _FULL:
        return f"the disk is full{where}: free some space and run the pass again"
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return f"no permission to write{where}: mend the permissions of the folder"
    return f"{error.strerror or type(error).__name__}{where}"


def _of_database(error: BaseException) -> str | None:
    from sqlalchemy.exc import DBAPIError

    if not isinstance(error, DBAPIError):
        return None
    cause: Any = error.orig
    text = _first_line(cause)
    if isinstance(cause, sqlite3.OperationalError):
        if "locked" in text:
            return "the database is locked by another program: end it, or wait and try again"
        if "disk is full" in text:
            return "the disk is full: free some space and run the pass again"
        if "disk I/O error" in text:
            # What SQLite says of a full disk where it maps its files into memory.
            return (
                "the disk is full or failing (disk I/O error): free some space, look at the disk, "
                "and run the pass again"
            )
        if "readonly" in text or "unable to open" in text:
            return f"the database cannot be opened for writing ({text}): mend its permissions"
    if "malformed" in text or "not a database" in text:
        return f"the database file is damaged ({text}): restore the last backup"
    if error.connection_invalidated or "connection" in text:
        return f"the database server is not to be reached: {text}"
    return f"the database refused: {text}"


def _first_line(error: BaseException) -> str:
    lines = str(error).strip().splitlines()
    return lines[0] if lines else type(error).__name__
