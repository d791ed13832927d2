"""The command `planum`: only here is printing, progress and exit codes."""
