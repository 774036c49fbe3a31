"""SEM-like pictures of fields, with their true masks."""
