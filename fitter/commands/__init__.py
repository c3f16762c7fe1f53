"""Groups of commands, one a file; each takes the app and registers itself. Nothing heavy is imported before a command runs."""
