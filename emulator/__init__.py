"""Emulated robot modules: the engine, its plant, and a second module written in C."""
