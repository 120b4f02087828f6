"""Closed forms with their working: the steps an engineer would write, and the hand values they give."""
