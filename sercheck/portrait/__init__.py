"""What a history looks like, in numbers and sentences; depends on ``intake``, ``serial`` and ``facts``."""
