"""An example driver."""
