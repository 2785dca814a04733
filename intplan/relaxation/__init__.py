"""The linear relaxation: one dictionary, dual simplex, rows added to a solved problem."""
