"""The durable memory: a journal of what came in, snapshots of what was made of it, an outbox of what is to be said."""
