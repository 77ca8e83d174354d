"""Decision space, loss tables, voltage schedule, limits and the whole-board evaluator."""
