"""The HTTP service and its page: uploads, runs, results, for a browser and for scripts."""
