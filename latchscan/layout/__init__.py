"""What is drawn: reading, regions, bodies, taps, emitters, distances."""
