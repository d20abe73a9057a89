"""The parts of the ``daqmx`` driver: options, troubles in words, session, task, counts, watch."""
