"""What is kept about every transition, and the sentences of the status codes."""

from fellwalk._core import FACTS, SENTENCES

__all__ = ["FACTS", "SENTENCES"]
