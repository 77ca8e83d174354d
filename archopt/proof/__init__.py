"""How near a searched front is to the truth: a small space gone through, an outer bound of a large one."""
