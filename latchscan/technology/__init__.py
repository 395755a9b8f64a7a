"""The technology: a YAML file in, a checked frozen value out."""
