"""What is known of an oil circuit: records, reading, graph and review."""
