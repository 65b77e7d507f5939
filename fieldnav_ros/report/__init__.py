"""The report: what a ledger says, as one page that people look at."""
