"""Pictures. matplotlib is imported when one is drawn, never before."""
