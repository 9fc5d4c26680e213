"""Reading, checking and healing closed surfaces."""
