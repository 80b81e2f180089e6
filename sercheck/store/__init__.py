"""What is kept between runs: the ledger; import from its files, which are read when first used."""
