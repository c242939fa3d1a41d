"""What the user has: a table or a plan, a model formula, and the quantities the decision hangs on."""
