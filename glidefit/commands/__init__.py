"""The words a person types: one file a command."""
