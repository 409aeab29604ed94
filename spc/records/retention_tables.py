"""The tables of what was moved away or summed up; part of the schema of `spc.records.tables`."""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Column,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    String,
    Table,
    Text,
)

from spc.records.tables import metadata

# Every drop that was packed into the archive. A path may come again with another content.
archived = Table(
    "archived",
    metadata,
    Column("path", Text, primary_key=True),  # below the drop folder, as in `sightings`
    Column("content_hash", String(64), primary_key=True),  # as in `files`
    Column("archive_path", Text, nullable=False),  # below the archive folder
    Column("bytes", BigInteger, nullable=False),  # of the packed file
    Column("archived_us", BigInteger, nullable=False),  # clock of the pass
)

# Months whose site values were taken away, or are being taken away (`done_us` is null).
aggregated_months = Table(
    "aggregated_months",
    metadata,
    Column("month", String(7), primary_key=True),  # YYYY-MM, in the bay's zone
    Column("begins_us", BigInteger, nullable=False),
    Column("ends_us", BigInteger, nullable=False),
    Column("started_us", BigInteger, nullable=False),  # the studies of the month were kept then
    Column("done_us", BigInteger),
    Column("last_measurement_id", BigInteger, nullable=False, default=0),
    Column("measurements", Integer, nullable=False, default=0),
    Column("site_values", BigInteger, nullable=False, default=0),
)

# What the sites of a wafer said when they were taken away: the columns of `wafer_results` that
# cannot be had from sums, and the values of the statistics by name.
kept_wafers = Table(
    "kept_wafers",
    metadata,
    Column("stream_id", ForeignKey("streams.id"), primary_key=True),
    Column("lot", Text, primary_key=True),
    Column("layer", Text, primary_key=True),
    Column("wafer", Text, primary_key=True),
    Column("measured_us", BigInteger, nullable=False),
    Column("baseline_id", ForeignKey("baselines.id")),  # whose signature is out of the squares
    Column("unit", Text, nullable=False),  # of the characteristic then
    Column("n_sites", Integer, nullable=False),
    Column("mean", Float(53), nullable=False),
    Column("sum_squares", Float(53), nullable=False),
    Column("df", Float(53), nullable=False),
    Column("out_of_spec_sites", Integer, nullable=False),
    Column("names", Text, nullable=False),  # of the statistics, joined by commas
    Column("statistics", LargeBinary, nullable=False),  # packed float64, in the order of the names
    Index(None, "lot"),
)

# Map distances belong to points, not to wafers.
kept_distances = Table(
    "kept_distances",
    metadata,
    Column("stream_id", ForeignKey("streams.id"), primary_key=True),
    Column("lot", Text, primary_key=True),
    Column("layer", Text, primary_key=True),
    Column("wafer", Text, primary_key=True),  # "" for the point of a whole lot
    Column("baseline_id", ForeignKey("baselines.id"), nullable=False),
    Column("n_wafers", Integer, nullable=False),
    Column("value", Float(53), nullable=False),
    Column("df", Float(53), nullable=False),
    Column("z", Float(53)),
    Index(None, "lot"),
)

# The capability of a month as its site values gave it, so that its review stays what it was.
kept_studies = Table(
    "kept_studies",
    metadata,
    Column("characteristic", Text, primary_key=True),
    Column("context", Text, primary_key=True),  # JSON; {} for the characteristic as a whole
    Column("month", String(7), primary_key=True),
    Column("asked", Text, nullable=False),  # JSON of unit, target, specification, gauge
    Column("n_wafers", Integer, nullable=False),
    Column("made_us", BigInteger, nullable=False),
    Column("numbers", Text, nullable=False),  # JSON of the row
    Column("verdict", Text, nullable=False),
)
