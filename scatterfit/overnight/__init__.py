"""Many traces: ledger, runner, watcher."""
