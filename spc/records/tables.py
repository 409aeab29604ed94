"""The tables of the database.

Stamps are integers: microseconds since 1970-01-01 UTC (column names end in `_us`). They sort and
compare the same on every database and load fast; `spc.records.stamps` turns them into datetimes.

A *measurement* is one parameter on one wafer at one stamp by one gauge, with the sites it read.
Its site values are kept packed in one binary column (little-endian float64, in the order of the
sites of its layout) instead of a row a site: a night of a million readings is then some ten
thousand rows, and a history of years still loads in one go. Nothing is lost by it: site names and
places are in `layouts`, the file and the lines in the measurement.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Column,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    UniqueConstraint,
)

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "fk": "fk_%(table_name)s_%(column_0_name)s",
        "pk": "pk_%(table_name)s",
    }
)

# SQLite only numbers rows by itself in an INTEGER key; PostgreSQL wants the larger type.
Id = BigInteger().with_variant(Integer, "sqlite")

# ---- what came in ------------------------------------------------------------------------------

files = Table(
    "files",
    metadata,
    Column("id", Id, primary_key=True),
    Column("content_hash", String(64), nullable=False, unique=True),  # SHA-256 of the bytes
    Column("path", Text, nullable=False),  # below the drop folder, with forward slashes
    Column("kind", String(16)),  # readings | process-log | events; null when quarantined
    Column("outcome", String(16), nullable=False),  # loaded | quarantined
    Column("reason", Text),  # why it was quarantined
    Column("feed", Text),  # name of the [[feed]] that mapped it, null for the house format
    Column("bytes", BigInteger, nullable=False),
    Column("rows", Integer, nullable=False, default=0),
    Column("loaded", Integer, nullable=False, default=0),
    Column("duplicate", Integer, nullable=False, default=0),
    Column("superseded", Integer, nullable=False, default=0),
    Column("rejected", Integer, nullable=False, default=0),
    Column("loaded_us", BigInteger, nullable=False),  # clock of the pass that took it in
    Column("newest_us", BigInteger),  # newest stamp in it
    # Digest of the settings it was read with: a quarantined file is tried again when they change.
    Column("read_with", String(64), nullable=False, default=""),
)

# Every path at which a content was seen, so that an unchanged file is not even read again.
sightings = Table(
    "sightings",
    metadata,
    Column("path", Text, primary_key=True),
    Column("bytes", BigInteger, nullable=False),
    Column("modified_ns", BigInteger, nullable=False),
    Column("content_hash", String(64), nullable=False),
    Column("seen_us", BigInteger, nullable=False),
)

rejects = Table(
    "rejects",
    metadata,
    Column("id", Id, primary_key=True),
    Column("file_id", ForeignKey("files.id"), nullable=False, index=True),
    Column("severity", String(8), nullable=False),  # rejected | warned (the row was loaded)
    Column("line", Integer, nullable=False),  # of the file, the header is line 1
    Column("column", Text),
    Column("value", Text),
    Column("reason", Text, nullable=False),
    Column("text", Text),  # the line as it stood
)

# The unit that each parameter is kept in, fixed by its first reading: nm for lengths.
parameters = Table(
    "parameters",
    metadata,
    Column("parameter", Text, primary_key=True),
    Column("unit", Text, nullable=False),
)

# A context is one combination of the context columns of readings or log rows. There are few, so
# they are kept once: JSON of {column: text} with sorted keys, absent and empty columns left out.
contexts = Table(
    "contexts",
    metadata,
    Column("id", Id, primary_key=True),
    Column("digest", String(64), nullable=False, unique=True),  # SHA-256 of the JSON
    Column("columns", Text, nullable=False),
)

# The sites of a measurement: JSON list of [site, x_mm, y_mm, field_x_mm, field_y_mm], null where
# not given, in the order of the packed values.
layouts = Table(
    "layouts",
    metadata,
    Column("id", Id, primary_key=True),
    Column("digest", String(64), nullable=False, unique=True),
    Column("sites", Text, nullable=False),
    Column("n", Integer, nullable=False),
)

# PostgreSQL holds its three references by triggers, a statement at a time: see migration 0004.
measurements = Table(
    "measurements",
    metadata,
    Column("id", Id, primary_key=True),
    Column("file_id", ForeignKey("files.id"), nullable=False, index=True),
    Column("parameter", Text, nullable=False),
    Column("layer", Text, nullable=False, default=""),
    Column("lot", Text, nullable=False),
    Column("wafer", Text, nullable=False),
    Column("measured_us", BigInteger, nullable=False),
    Column("processed_us", BigInteger),
    Column("context_id", ForeignKey("contexts.id"), nullable=False),
    Column("layout_id", ForeignKey("layouts.id"), nullable=False),
    Column("unit", Text, nullable=False),  # house unit: nm for lengths, else as given
    Column("n", Integer, nullable=False),
    Column("mean", Float(53), nullable=False),
    Column("sum_squares", Float(53), nullable=False),  # about the mean
    Column("site_values", LargeBinary),  # null once aggregated by the retention rule
    Column("first_line", Integer, nullable=False),
    Column("last_line", Integer, nullable=False),
    Index(None, "lot", "wafer", "parameter", "layer"),
    Index(None, "measured_us"),
)

process_log = Table(
    "process_log",
    metadata,
    Column("id", Id, primary_key=True),
    Column("file_id", ForeignKey("files.id"), nullable=False, index=True),
    Column("processed_us", BigInteger, nullable=False),
    Column("lot", Text, nullable=False),
    Column("wafer", Text, nullable=False),
    Column("layer", Text, nullable=False, default=""),
    Column("step", Text, nullable=False, default=""),
    Column("tool", Text, nullable=False),
    Column("module", Text, nullable=False, default=""),
    # every context column incl. layer, step, tool, module
    Column("context_id", ForeignKey("contexts.id"), nullable=False),
    Index(None, "lot", "wafer", "layer"),
    Index(None, "processed_us"),
    Index(None, "context_id", "processed_us"),
)

bay_events = Table(
    "bay_events",
    metadata,
    Column("id", Id, primary_key=True),
    Column("file_id", ForeignKey("files.id"), nullable=False, index=True),
    Column("at_us", BigInteger, nullable=False, index=True),
    Column("kind", Text, nullable=False),
    Column("tool", Text),
    Column("module", Text),
    Column("text", Text),
    Column("columns", Text, nullable=False, default="{}"),  # JSON of the other columns
)

# ---- what was made of it -----------------------------------------------------------------------

streams = Table(
    "streams",
    metadata,
    Column("id", Id, primary_key=True),
    Column("characteristic", Text, nullable=False),
    Column("context", Text, nullable=False),  # JSON of the stream_by columns, sorted keys
    UniqueConstraint("characteristic", "context"),
)

# What each characteristic was last evaluated with: when the plan changes what its points are, they
# are made anew.
evaluations = Table(
    "evaluations",
    metadata,
    Column("characteristic", Text, primary_key=True),
    Column("plan_digest", String(64), nullable=False),
    Column("as_of_us", BigInteger, nullable=False),
    Column("last_measurement_id", BigInteger, nullable=False, default=0),
    Column("last_log_id", BigInteger, nullable=False, default=0),
)

# One wafer in one stream: its statistics of one night's reading of it, current at the last pass.
wafer_results = Table(
    "wafer_results",
    metadata,
    Column("stream_id", ForeignKey("streams.id"), primary_key=True),
    Column("lot", Text, primary_key=True),
    Column("layer", Text, primary_key=True),
    Column("wafer", Text, primary_key=True),
    Column("at_us", BigInteger, nullable=False),  # processed where known, else measured
    Column("measured_us", BigInteger, nullable=False),
    Column("processed_us", BigInteger),
    Column("context_id", ForeignKey("contexts.id"), nullable=False),
    # other steps of the wafer in the log as `step.column` texts
    Column("step_context_id", ForeignKey("contexts.id"), nullable=False),
    Column("n_sites", Integer, nullable=False),
    Column("mean", Float(53), nullable=False),  # in the unit of the characteristic
    # sum of squares about the wafer mean with the signature of the baseline out, and its df
    Column("sum_squares", Float(53), nullable=False),
    Column("df", Float(53), nullable=False),
    # packed float64: the wafer's value of each statistic, in the order of the plan (NaN: none)
    Column("statistics", LargeBinary, nullable=False),
    Column("out_of_spec_sites", Integer, nullable=False, default=0),
    Index(None, "stream_id", "at_us"),
    Index(None, "lot"),
)

points = Table(
    "points",
    metadata,
    Column("stream_id", ForeignKey("streams.id"), primary_key=True),
    Column("statistic", String(24), primary_key=True),
    Column("lot", Text, primary_key=True),
    Column("layer", Text, primary_key=True),
    Column("wafer", Text, primary_key=True),  # "" for the point of a whole lot
    Column("at_us", BigInteger, nullable=False),
    Column("measured_us", BigInteger, nullable=False),
    Column("processed_us", BigInteger),
    Column("value", Float(53), nullable=False),
    Column("n_wafers", Integer, nullable=False),
    Column("n_sites", Integer, nullable=False),  # all site readings behind the point
    Column("effective_sites", Float(53), nullable=False),  # n_w^2 / sum(1/n_sites per wafer)
    Column("df", Float(53), nullable=False),  # degrees of freedom of a spread
    Column("baseline_id", ForeignKey("baselines.id")),
    Column("phase", String(12), nullable=False),  # baseline | monitoring
    Column("center", Float(53)),
    Column("lower_limit", Float(53)),
    Column("upper_limit", Float(53)),
    Column("sigma", Float(53)),
    Column("z", Float(53)),  # standardised value that the rules see
    Column("rules", Text, nullable=False, default=""),  # names joined by commas
    Index(None, "stream_id", "statistic", "at_us"),
    Index(None, "measured_us"),
)

# A set of limits of one stream: all its statistics in one payload (see spc.monitoring.baselines).
baselines = Table(
    "baselines",
    metadata,
    Column("id", Id, primary_key=True),
    Column("stream_id", ForeignKey("streams.id"), nullable=False, index=True),
    # automatic | proposed | approved | withdrawn
    Column("status", String(12), nullable=False),
    Column("from_us", BigInteger, nullable=False),  # first point (at_us) that the limits apply to
    Column("first_us", BigInteger, nullable=False),  # first and last point of the baseline itself
    Column("last_us", BigInteger, nullable=False),
    Column("n_points", Integer, nullable=False),
    Column("payload", Text, nullable=False),
    Column("made_us", BigInteger, nullable=False),
    Column("made_by", Text, nullable=False),
    Column("reason", Text, nullable=False),
    Column("decided_us", BigInteger),  # approved or withdrawn
    Column("decided_by", Text),
    Column("decided_reason", Text),
)

excursions = Table(
    "excursions",
    metadata,
    Column("id", Id, primary_key=True),
    Column("status", String(12), nullable=False),  # open | contained | closed
    Column("tier", String(8), nullable=False),  # act | watch
    Column("pattern", String(12), nullable=False),
    Column("identity", Text, nullable=False, index=True),  # what makes it the same one next night
    Column("opened_us", BigInteger, nullable=False),
    Column("updated_us", BigInteger, nullable=False),
    Column("merged_into", ForeignKey("excursions.id")),
    Column("payload", Text, nullable=False),  # JSON of the contract, without the columns above
)

# Every state an excursion was in, one row a pass that changed it.
excursion_history = Table(
    "excursion_history",
    metadata,
    Column("excursion_id", ForeignKey("excursions.id"), primary_key=True),
    Column("as_of_us", BigInteger, primary_key=True),
    Column("change", String(12), nullable=False),  # opened | updated
    Column("tier", String(8), nullable=False),
    Column("pattern", String(12), nullable=False),
    Column("payload", Text, nullable=False),
)

# Hand actions on anything, append-only; `hash` chains each row to the one before it.
actions = Table(
    "actions",
    metadata,
    Column("id", Id, primary_key=True),
    Column("at_us", BigInteger, nullable=False),
    Column("who", Text, nullable=False),
    Column("subject", Text, nullable=False),  # excursion:12, baseline:3
    Column("action", Text, nullable=False),  # contain, close, reopen, comment, approve, …
    Column("text", Text, nullable=False, default=""),
    Column("detail", Text, nullable=False, default="{}"),  # JSON
    Column("previous_hash", String(64), nullable=False),
    Column("hash", String(64), nullable=False, unique=True),
    Index(None, "subject"),
)

# ---- passes and mail ---------------------------------------------------------------------------

passes = Table(
    "passes",
    metadata,
    Column("id", Id, primary_key=True),
    Column("as_of_us", BigInteger, nullable=False, unique=True),
    Column("finished", Integer, nullable=False, default=0),
    Column("last_measurement_id", BigInteger, nullable=False, default=0),
    Column("last_log_id", BigInteger, nullable=False, default=0),
    Column("result", Text, nullable=False, default="{}"),  # JSON of `nightly`
    Column("report", Text),  # path below the reports folder
)

outbox = Table(
    "outbox",
    metadata,
    Column("id", Id, primary_key=True),
    Column("message_id", Text, nullable=False, unique=True),
    Column("as_of_us", BigInteger, nullable=False, index=True),
    Column("recipient", Text, nullable=False),
    Column("subject", Text, nullable=False),
    Column("message", LargeBinary, nullable=False),  # the bytes that are sent
    Column("state", String(8), nullable=False, index=True),  # queued | sending | sent | failed
    Column("attempts", Integer, nullable=False, default=0),
    Column("next_try_us", BigInteger, nullable=False),
    Column("sent_us", BigInteger),
    Column("last_error", Text),
)

# ---- re-evaluation -----------------------------------------------------------------------------

# Runs of `yellowbay reevaluate`. Who works for one names its `epoch`; a run that goes on after a
# crash, and a pass that overtakes it, shut out whoever still works for the old one.
reevaluations = Table(
    "reevaluations",
    metadata,
    Column("id", Id, primary_key=True),
    Column("key", String(64), nullable=False),  # digest of all that the results follow from
    Column("status", String(12), nullable=False),  # running | finished | overtaken
    Column("epoch", Integer, nullable=False, default=1),
    Column("as_of_us", BigInteger, nullable=False),
    Column("last_measurement_id", BigInteger, nullable=False),
    Column("last_log_id", BigInteger, nullable=False),
    Column("plan_digests", Text, nullable=False),  # JSON {characteristic: digest}
    Column("whole", Text, nullable=False),  # JSON list: characteristics with all their streams
    Column("told", Integer, nullable=False, default=0),  # whether a pass has taken note of it
    Column("result", Text, nullable=False, default="{}"),  # JSON
)

# The partitions of a run: streams of one characteristic, and the lots that they are in.
reevaluation_parts = Table(
    "reevaluation_parts",
    metadata,
    Column("run_id", ForeignKey("reevaluations.id"), primary_key=True),
    Column("number", Integer, primary_key=True),
    Column("characteristic", Text, nullable=False),
    Column("content", LargeBinary, nullable=False),  # packed JSON {streams, lots}
    Column("result", Text),  # JSON once it is done
)
