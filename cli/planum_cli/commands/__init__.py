"""One short module per command, loaded when it runs."""
