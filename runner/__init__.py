"""Time: what is fired when, how strongly, whether it may be, and what happened."""
