"""Results as text, markdown, CSV and JSON."""
