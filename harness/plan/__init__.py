"""Plans: reading one, crossing its factors, and the keys of everything that it asks for."""
