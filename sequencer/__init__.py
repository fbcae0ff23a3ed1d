"""Read a recipe, plan it, run it, keep what was measured, compute the answers and show them."""
