"""Step 1: what was seen, from where, when and how well."""
