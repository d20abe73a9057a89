"""What the operator types, sees and prints: one short module per noun."""
