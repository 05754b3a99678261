"""The commands: thin, and imported lazily so that each starts fast."""
