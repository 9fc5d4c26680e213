"""What a solve hands out: values, measures, accuracy, files."""
