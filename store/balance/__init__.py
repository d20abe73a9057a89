"""Pure arithmetic on records: coefficients, corrections, holes, tolerance, trial weight, uncertainty.

Nothing here opens a file, a socket or a database, or reads a clock.
"""
