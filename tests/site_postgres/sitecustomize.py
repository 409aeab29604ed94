"""Read at the start of Python in processes that tests run on PostgreSQL: tests/on_postgres.py."""

import os

if os.environ.get("YELLOWBAY_TEST_SERVER"):
    from tests.on_postgres import install

    install()
