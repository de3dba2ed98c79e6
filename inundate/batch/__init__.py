"""The monthly batch: pipeline file, ledger, steps, local or distributed workers. It calls the parts; no part calls it."""
