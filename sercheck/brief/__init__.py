"""The brief: what the person on call reads of a batch, from records and the ledger, as page, text, markdown, JSON."""
