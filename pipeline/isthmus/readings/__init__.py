"""What the rows of each kind of log mean: who contacted whom, what that is worth, and what is left out and why."""
