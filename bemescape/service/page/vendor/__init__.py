"""Libraries of the page, bundled; see README.md beside this file."""
