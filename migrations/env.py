"""How Alembic runs the migrations: on the connection and in the transaction it is handed."""

from alembic import context

connection = context.config.attributes.get("connection")
if connection is None:
    raise SystemExit("run 'millikeep migrate': it makes a backup and hands over the connection")

context.configure(connection=connection, transactional_ddl=True, render_as_batch=False)
context.run_migrations()
