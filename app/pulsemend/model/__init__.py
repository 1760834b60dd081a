"""The frozen meaning of everything: recording facts, plan, marks, trials, epochs, ledger."""
