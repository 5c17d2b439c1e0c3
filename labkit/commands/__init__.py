"""The commands, a module each or a few; what is heavy is imported by the command that needs it."""
