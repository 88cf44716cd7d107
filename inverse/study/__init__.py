"""The study file: what it says, what is wrong with it, and what can be done with it."""
