"""The shell commands, one file each."""
