"""Pictures of a result: scenes, the desktop window and the report."""
