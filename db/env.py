"""How Alembic reaches the logbook: through the connection that the program hands over."""

from alembic import context

from planner.errors import NightfringeError
from planner.logbook.tables import Base

connection = context.config.attributes.get("connection")
if connection is None:
    raise NightfringeError("migrations run through the program, which holds the lock; not through alembic alone")

context.configure(connection=connection, target_metadata=Base.metadata, render_as_batch=True, transactional_ddl=True)
with context.begin_transaction():
    context.run_migrations()
