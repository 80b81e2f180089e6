"""Trying the rules on yesterday's batches, healthy and with faults put in."""
