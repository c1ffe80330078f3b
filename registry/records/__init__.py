"""What is stored: tables, canonical form and digests, quantities, event kinds, units."""
