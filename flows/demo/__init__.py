"""The demo: a night at an invented firm, simulated and written as its readers would have written it."""

from flows.demo.night import write_demo

__all__ = ["write_demo"]
