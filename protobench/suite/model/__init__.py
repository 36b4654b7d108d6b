"""A model of the contract that runs beside the module and says which answers and events a sound one may give."""

from protobench.suite.model.model import Model

__all__ = ["Model"]
