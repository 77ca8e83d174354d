"""The public front and design that render themselves, and the files written and read back."""
