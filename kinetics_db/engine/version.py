"""The version of what the engine computes. Raise it when a stored fit would come out with other numbers."""

ENGINE_VERSION = "0.1.0"
