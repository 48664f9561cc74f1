"""Tables of the history: one row per measurement, its estimates beside it, the rules of the charts.

Made for SQLite and PostgreSQL; any database that SQLAlchemy knows will do.
"""

from sqlalchemy import (
    Column,
    Double,
    ForeignKey,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    UniqueConstraint,
)

FORMAT = "identkit-history/1"
METADATA = MetaData()

RULE = Table(
    "identkit_rule",
    METADATA,
    Column("name", String(64), primary_key=True),
    Column("value", Text, nullable=False),
)
"""format, run_length, baseline_units, reference_temperature, released_set (a digest)."""

PLANT_SET = Table(
    "identkit_plant_set",
    METADATA,
    Column("digest", String(64), primary_key=True),
    Column("name", Text, nullable=False),
    Column("suffix", String(8), nullable=False),
    Column("content", LargeBinary, nullable=False),
    Column("released_at", String(40), nullable=False),
)

CORRECTION = Table(
    "identkit_correction",
    METADATA,
    Column("mode", String(64), primary_key=True),
    Column("quantity", String(128), primary_key=True),
    Column("value", Double, nullable=False),
    Column("temperature_slope", Double),
    Column("temperature_slope_standard_error", Double),
    Column("position_slope", Double),
    Column("position_slope_standard_error", Double),
    Column("unit_deviation", Double),
    Column("head_deviation", Double),
    Column("residual_deviation", Double),
)
"""How measurements are brought to one temperature, from the population of the first folder."""

HEAD_VALUE = Table(
    "identkit_head_value",
    METADATA,
    Column("mode", String(64), primary_key=True),
    Column("quantity", String(128), primary_key=True),
    Column("head", String(128), primary_key=True),
    Column("value", Double, nullable=False),
)

ADDITION = Table(
    "identkit_addition",
    METADATA,
    Column("id", Integer, primary_key=True),
    Column("added_at", String(40), nullable=False),
    Column("folder", Text, nullable=False),
    Column("version", String(64), nullable=False),
    Column("notes", Text, nullable=False),
)

MEASUREMENT = Table(
    "identkit_measurement",
    METADATA,
    Column("id", Integer, primary_key=True),
    Column("addition_id", Integer, ForeignKey(ADDITION.c.id), nullable=False),
    Column("response", Text, nullable=False),
    Column("measured_at", String(40), nullable=False),
    Column("digest", String(64), nullable=False),
    Column("unit", Text, nullable=False),
    Column("lot", Text, nullable=False),
    Column("head", Text, nullable=False),
    Column("temperature", Double),
    Column("position", Double),
    Column("labels", Text, nullable=False),
    Column("excluded", Text, nullable=False),
    Column("folder_reach", Double),
    Column("folder_set", String(64), nullable=False),
    Column("plant", Text, nullable=False),
    Column("covariance_parameters", Text, nullable=False),
    Column("covariance", LargeBinary, nullable=False),
    UniqueConstraint("response", "measured_at", "digest", name="identkit_one_entry"),
)
"""`plant` is JSON as in a set file; `covariance` its lower triangle, row by row, little-endian
doubles; `excluded` the reason why it is left out, empty where it is not."""

ESTIMATE = Table(
    "identkit_estimate",
    METADATA,
    Column("measurement_id", Integer, ForeignKey(MEASUREMENT.c.id), primary_key=True),
    Column("mode", String(64), primary_key=True),
    Column("quantity", String(128), primary_key=True),
    Column("value", Double, nullable=False),
    Column("standard_error", Double),
)

REACH = Table(
    "identkit_reach",
    METADATA,
    Column("measurement_id", Integer, ForeignKey(MEASUREMENT.c.id), primary_key=True),
    Column("set_digest", String(64), primary_key=True),
    Column("value", Double, nullable=False),
    Column("frequency", Double),
    Column("in_set", Integer, nullable=False),
)
"""`in_set` is 1 for a plant from which the set was made: its reach is at most 1 by construction."""
