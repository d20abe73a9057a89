"""From samples to vectors to a stored reading: drivers, ring, signal, pipeline, daemon, control."""
