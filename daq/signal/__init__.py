"""Pure arithmetic on arrays: no clock, no thread, no I/O."""
