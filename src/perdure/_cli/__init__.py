"""The command line: arguments, progress, tables, exit statuses. The work is done by `perdure._pipeline`."""
