"""How a task picks a server: one file a policy."""
