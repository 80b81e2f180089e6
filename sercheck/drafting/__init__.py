"""From a history to a first rule file for its feed; ``sercheck.draft`` hands on the one function of it."""
