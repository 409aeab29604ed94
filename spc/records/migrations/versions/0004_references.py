"""references of measurements, held a statement at a time on PostgreSQL

A million readings are some 80 000 measurements with three references each. PostgreSQL's own foreign
keys look up each of them by itself, which took half of the time of storing. Here the same is held
by triggers that look up all rows of a statement at once, and lock what they refer to as foreign
keys do. SQLite keeps its foreign keys.
"""

from __future__ import annotations

from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None

PARENTS = {"file_id": "files", "context_id": "contexts", "layout_id": "layouts"}

_CHECK = """
CREATE FUNCTION measurements_refer() RETURNS trigger LANGUAGE plpgsql AS $$
DECLARE
    wanted bigint;
    found bigint;
BEGIN
{checks}
    RETURN NULL;
END $$
"""
_ONE = """
    SELECT count(DISTINCT {column}) INTO wanted FROM fresh;
    WITH held AS (
        SELECT id FROM {parent} WHERE id IN (SELECT {column} FROM fresh) FOR KEY SHARE
    )
    SELECT count(*) INTO found FROM held;
    IF found < wanted THEN
        RAISE foreign_key_violation USING MESSAGE =
            'a measurement has a {column} that is not in {parent}';
    END IF;
"""
_FIXED = """
CREATE FUNCTION measurements_refer_for_good() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    RAISE foreign_key_violation USING MESSAGE =
        'what a measurement refers to is never changed';
END $$
"""
_NEEDED = """
CREATE FUNCTION {parent}_needed() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    IF EXISTS (SELECT FROM measurements WHERE {column} = OLD.id) THEN
        RAISE foreign_key_violation USING MESSAGE =
            'measurements refer to a row of {parent} that was to go';
    END IF;
    RETURN NULL;
END $$
"""


def upgrade() -> None:
    """Go forward."""
    if op.get_bind().dialect.name != "postgresql":
        return
    for column in PARENTS:
        op.drop_constraint(f"fk_measurements_{column}", "measurements", type_="foreignkey")
    checks = "".join(_ONE.format(column=c, parent=p) for c, p in PARENTS.items())
    op.execute(_CHECK.format(checks=checks))
    op.execute(
        "CREATE TRIGGER refer AFTER INSERT ON measurements REFERENCING NEW TABLE AS fresh "
        "FOR EACH STATEMENT EXECUTE FUNCTION measurements_refer()"
    )
    op.execute(_FIXED)
    op.execute(
        f"CREATE TRIGGER refer_for_good BEFORE UPDATE OF {', '.join(PARENTS)} ON measurements "
        "FOR EACH STATEMENT EXECUTE FUNCTION measurements_refer_for_good()"
    )
    for column, parent in PARENTS.items():
        op.execute(_NEEDED.format(column=column, parent=parent))
        for event in ("DELETE", "UPDATE OF id"):
            name = f"needed_{event.split()[0].lower()}"
            op.execute(
                f"CREATE TRIGGER {name} AFTER {event} ON {parent} "
                f"FOR EACH ROW EXECUTE FUNCTION {parent}_needed()"
            )
        # Foreign keys refuse to empty a table that is referred to, whatever is in it.
        op.execute(
            f"CREATE TRIGGER needed_truncate BEFORE TRUNCATE ON {parent} "
            "FOR EACH STATEMENT EXECUTE FUNCTION measurements_refer_for_good()"
        )
