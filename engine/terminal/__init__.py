"""The command line: commands, exit codes, rendering."""
