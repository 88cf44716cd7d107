"""Objectives joined to parameters: the only place where the chain rule goes all the way down."""
