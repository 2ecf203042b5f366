"""From datasheet points to laws: each part in a file of its own name."""
