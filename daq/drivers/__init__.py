"""One file per kind of source, behind the base class of ``base.py``; names in ``registry.py``."""
