"""The database: tables, migrations and one module per kind of question asked of it."""
