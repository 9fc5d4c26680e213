"""Demo shapes and their cases; README.md beside this file tells how they were made."""
