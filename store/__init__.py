"""What happened, by machine and date, and what it implies. SQL lives here alone."""
