"""`yellowbay check`: every mistake of the configuration, and the alarm budget of the bay.

No database is needed. One that exists is opened for reading only; none is ever created.
"""

from __future__ import annotations

import math
import os
import re
import textwrap
from collections.abc import Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.context import config_file

if TYPE_CHECKING:
    from collections.abc import Iterator

    from sqlalchemy import Connection, Engine

    from config.control_plan import Characteristic
    from config.errors import Mistake
    from config.load import Bay
    from spc.monitoring.alarm_budget import AlarmBudget

WIDTH = 100


@dataclass(frozen=True)
class Checked:
    """What a check found: `lines` for people, `as_json` for programs."""

    mistakes: tuple[Mistake, ...]
    warnings: tuple[str, ...] = ()
    bay: Bay | None = None
    budget: AlarmBudget | None = None

    def as_json(self) -> dict[str, Any]:
        """The document of `check --json`; rates are a night, null where there is no history."""
        head = {"ok": not self.mistakes, "mistakes": [_mistake_json(m) for m in self.mistakes]}
        found = self.budget
        total = None if found is None else found.total
        return head | {
            "warnings": list(self.warnings),
            "nights": None if found is None else found.nights,
            "points_per_night": None if found is None else found.points_per_night,
            "expected_false_signals": None if total is None else total.signals,
            "expected_false_signals_known_limits": None if total is None else total.known,
            "expected_false_signals_independent": None if total is None else total.independent,
            "expected_false_excursions": None if total is None else total.events,
            "by_rule": {} if total is None else _by_rule(total),
            "budget": None if found is None else found.budget,
            "false_act_excursions_allowed": None if found is None else found.effects_allowed,
            "characteristics": [] if found is None else _characteristics_json(found),
            "streams": [] if found is None else _streams_json(found),
            "designs": [] if found is None else _designs_json(found),
        }

    @property
    def lines(self) -> list[str]:
        """The same in words, no wider than WIDTH columns but for the mistakes, one line each."""
        if self.mistakes:
            count = len(self.mistakes)
            head = f"The configuration has {count} mistake{'s' if count > 1 else ''}."
            return [head, *(str(mistake) for mistake in self.mistakes)]
        assert self.bay is not None
        assert self.budget is not None  # without mistakes both are there
        from service.check_words import budget_lines

        return [
            *_wrapped(_summary(self.bay)),
            *(line for text in self.warnings for line in _wrapped(f"Warning: {text}")),
            "",
            *budget_lines(self.budget, self.bay.settings.bay.zone),
        ]


def check_bay(config: Path | None) -> Checked:
    """Read the configuration and reckon the alarm budget, with the history where there is one.

    Parameters
    ----------
    config : the file; None for the one that the environment or the default names.
    """
    from config.errors import ConfigurationError
    from config.load import load_bay

    try:
        bay = load_bay(config_file(config))
    except ConfigurationError as error:
        return Checked(tuple(error.mistakes))
    mistakes = _design_mistakes(bay)
    if mistakes:
        return Checked(tuple(mistakes), bay=bay)
    warnings = [*_folder_warnings(bay), *_mail_warnings(bay), *_plan_warnings(bay)]
    budget = _reckon(bay, warnings)
    return Checked((), tuple(warnings), bay, budget)


# ---- what only shows here -----------------------------------------------------------------------


def _design_mistakes(bay: Bay) -> list[Mistake]:
    """Rules and memory charts that are well written and yet cannot be."""
    from config.errors import Mistake
    from spc.stats.designs import CusumDesign, EwmaDesign
    from spc.stats.rules import parse_rules

    file = bay.settings.bay.control_plan.name
    found = []

    def tried(key: str, value: Any, make: Any, mend: str) -> None:
        try:
            make()
        except ValueError as error:
            found.append(Mistake(file, key, value, str(error), mend))

    for i, one in enumerate(bay.plan.characteristic):
        key = f"characteristic[{i}]"
        mend = "Write each rule once, with numbers that can be: k of m points, k from 1 to m."
        tried(f"{key}.rules", list(one.rules), lambda one=one: parse_rules(one.rules), mend)
        ewma, cusum = one.chart.ewma, one.chart.cusum
        if ewma is not None:
            mend = "Write [lambda, L], for example [0.2, 2.962]."
            tried(f"{key}.chart.ewma", list(ewma), lambda ewma=ewma: EwmaDesign(*ewma), mend)
        if cusum is not None:
            mend = "Write [k, h], for example [0.5, 4.77]."
            tried(f"{key}.chart.cusum", list(cusum), lambda cusum=cusum: CusumDesign(*cusum), mend)
    return found


def _folder_warnings(bay: Bay) -> list[str]:
    drops = bay.path(bay.settings.drops.folder)
    if drops.is_dir():
        return []
    what = "is no folder" if drops.exists() else "is not there yet"
    return [f"the drop folder {drops} {what}; nothing will be taken in until it is."]


def _mail_warnings(bay: Bay) -> list[str]:
    from spc.records.sessions import secret

    mail, out = bay.settings.mail, []
    if mail.user is not None:
        try:
            password = secret("YELLOWBAY_SMTP_PASSWORD")
        except OSError as error:
            password, reason = None, f" ({error.strerror})"
        else:
            reason = ""
        if not password:
            out.append(
                f"mail.user is {mail.user!r}, but YELLOWBAY_SMTP_PASSWORD is not set in the "
                f"environment{reason}; the mail server will refuse to send."
            )
        elif mail.security == "none":
            out.append("mail.security is none: the password travels in the clear.")
    if mail.host is None and mail.user is not None:
        out.append("mail.user is given without mail.host; messages are only kept as files.")
    if not mail.to and not any(one.owners for one in bay.plan.characteristic):
        out.append("nobody gets mail: mail.to is empty and no characteristic has owners.")
    return out


def _plan_warnings(bay: Bay) -> list[str]:
    return [
        f"{one.name}: rules is empty, so that no point of it ever signals."
        for one in bay.plan.characteristic
        if not one.rules
    ]


def _pace_warnings(connection: Connection, bay: Bay) -> list[str]:
    """Streams that would fall silent by the plan although nothing stopped."""
    from spc.records import passes, series

    out = []
    for one in bay.plan.characteristic:
        if one.expected_every is None:
            continue
        ids = list(series.stream_ids(connection, one.name).values())
        gaps = passes.mean_gaps(connection, ids)
        limit = one.expected_every.total_seconds() * 1e6
        slow = [gap for gap in gaps.values() if gap > limit]
        if slow:
            hours = max(slow) / 3.6e9
            out.append(
                f"{one.name}: expected_every is {limit / 3.6e9:g} h, but {len(slow)} of its "
                f"{len(ids)} streams are measured less often than that on average (every "
                f"{hours:.0f} h at the longest); they will be called silent again and again."
            )
    return out


# ---- the history, where there is one ------------------------------------------------------------


def _reckon(bay: Bay, warnings: list[str]) -> AlarmBudget:
    """The budget with the history, or by the plan alone; adds to the warnings."""
    from sqlalchemy.exc import SQLAlchemyError

    from spc.monitoring.alarm_budget import budget

    try:
        with _for_reading(bay) as connection:
            if connection is not None:
                problem = _schema_problem(connection)
                if problem is None:
                    warnings += _pace_warnings(connection, bay)
                    return budget(connection, bay, _last_pass_us(connection))
                warnings.append(problem)
    except (SQLAlchemyError, OSError) as error:
        from service.failures import explain

        reason = explain(error)[0].removeprefix("yellowbay: ")
        warnings.append(f"the history cannot be read: {reason}")
    return budget(None, bay, None)


@contextmanager
def _for_reading(bay: Bay) -> Iterator[Connection | None]:
    """A connection that cannot write; None where no database has been made yet."""
    url = bay.database_url
    if url.startswith("sqlite:///"):
        file = Path(url.removeprefix("sqlite:///"))
        if not file.is_file() or file.stat().st_size == 0:
            yield None
            return
        engine = _sqlite_for_reading(file)
    else:
        engine = _postgres_for_reading(url)
    try:
        with engine.connect() as connection:
            yield connection
    finally:
        engine.dispose()


def _sqlite_for_reading(file: Path) -> Engine:
    import sqlite3
    from urllib.parse import quote

    from sqlalchemy import create_engine

    # Where not even the index of the write-ahead log can be made, nobody else writes either.
    locked = not os.access(file.parent, os.W_OK) and not Path(f"{file}-shm").exists()
    name = f"file:{quote(str(file))}?mode=ro" + ("&immutable=1" if locked else "")
    return create_engine("sqlite://", creator=lambda: sqlite3.connect(name, uri=True, timeout=10))


def _postgres_for_reading(url: str) -> Engine:
    from sqlalchemy import create_engine
    from sqlalchemy.engine import make_url

    from spc.records.sessions import PASSWORD_VARIABLE, secret

    parsed = make_url(url).set(drivername="postgresql+psycopg")
    password = secret(PASSWORD_VARIABLE)
    if password is not None:
        parsed = parsed.set(password=password)
    options = "-c default_transaction_read_only=on -c statement_timeout=60000"
    return create_engine(parsed, connect_args={"options": options, "connect_timeout": 5})


def _schema_problem(connection: Connection) -> str | None:
    from sqlalchemy import inspect, text

    from spc.records.schema import latest_revision

    if not inspect(connection).has_table("alembic_version"):
        return "the database has no tables yet; the first pass makes them."
    here = connection.scalar(text("SELECT version_num FROM alembic_version"))
    wanted = latest_revision()
    if here == wanted:
        return None
    return f"the database has schema {here}, this program {wanted}; its history is left out."


def _last_pass_us(connection: Connection) -> int | None:
    """Clock of the newest finished pass; without one nothing has been evaluated."""
    from spc.records import passes

    return passes.last_before(connection, 2**62)


# ---- JSON and words -----------------------------------------------------------------------------


def _mistake_json(mistake: Mistake) -> dict[str, Any]:
    return {
        "file": mistake.file,
        "key": mistake.key,
        "value": _harmless(mistake.value),
        "reason": mistake.reason,
        "mend": mistake.mend,
    }


def _harmless(value: Any) -> Any:
    """A TOML value as JSON, without the password of a URL."""
    if isinstance(value, dict):
        return {str(key): _harmless(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_harmless(item) for item in value]
    if value is None or isinstance(value, (bool, int)):
        return value
    if isinstance(value, float) and math.isfinite(value):
        return value
    return re.sub(r"(://[^/@:\s]*:)[^/@\s]+@", r"\1***@", str(value))


def _by_rule(rates: Any) -> dict[str, float]:
    return {name: signals for name, signals, _ in rates.by_rule}


def _characteristics_json(found: AlarmBudget) -> list[dict[str, Any]]:
    return [
        {
            "name": one.name,
            "streams": one.n_streams,
            "points_per_night": one.points_per_night,
            "expected_false_signals": None if one.expected is None else one.expected.signals,
            "expected_false_excursions": None if one.expected is None else one.expected.events,
            "by_rule": {} if one.expected is None else _by_rule(one.expected),
            "expected_false_signals_per_100_points": one.per_100_points.signals,
        }
        for one in found.characteristics
    ]


def _streams_json(found: AlarmBudget) -> list[dict[str, Any]]:
    return [
        {
            "characteristic": one.characteristic,
            "context": one.context,
            "statistic": one.statistic,
            "points_per_night": one.points_per_night,
            "autocorrelation": one.chart.phi,
            "residuals": one.chart.residuals,
            "expected_false_signals": one.expected.signals,
        }
        for one in found.charts
    ]


def _designs_json(found: AlarmBudget) -> list[dict[str, Any]]:
    return [
        {
            "family": one.family,
            "design": one.design.text,
            "arl0": one.arl0,
            "arl": one.arl,
            "shift": found.shift,
        }
        for one in found.designs
    ]


def _summary(bay: Bay) -> str:
    plan = bay.plan.characteristic
    things = f"{len(plan)} characteristic{'s' if len(plan) != 1 else ''}"
    return (
        f"The configuration of {bay.settings.bay.name} has no mistakes: {things} in "
        f"{bay.settings.bay.control_plan.name}, {_rules_text(plan)}."
    )


def _rules_text(plan: Sequence[Characteristic]) -> str:
    names = list(dict.fromkeys(rule for one in plan for rule in one.rules))
    return "rules " + ", ".join(names) if names else "no rules"


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  ", break_on_hyphens=False)
