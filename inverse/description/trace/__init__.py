"""What was measured: files, checks, and a first look that needs no model."""
