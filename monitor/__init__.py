"""From reconciled states to figures, episodes, the page and the command line."""
