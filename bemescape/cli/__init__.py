"""The shell: one file per command."""
