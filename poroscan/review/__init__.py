"""The local page for looking and correcting."""
