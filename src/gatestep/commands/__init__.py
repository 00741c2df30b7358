"""The bodies of the command line's commands, one module a group."""
