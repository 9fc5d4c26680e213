"""The page: static files, served as they are."""
