"""Which electrode sites need care, why, and what to check next."""
