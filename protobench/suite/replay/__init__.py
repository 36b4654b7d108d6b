"""Failures made short, and written as scripts that replay them."""
