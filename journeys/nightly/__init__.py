"""The nightly job: a ledger that adds each night's rows to what it holds, and publishes what comes of it."""
