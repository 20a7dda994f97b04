"""Runs the migrations on the connection it is handed, inside that connection's transaction.

There is no alembic.ini: `trapd.record.schema` makes the configuration and keeps the transaction.
"""

from alembic import context

context.configure(connection=context.config.attributes["connection"])
context.run_migrations()
