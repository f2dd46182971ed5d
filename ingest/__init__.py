"""From historian exports to reconciled states: everything that happens before a figure is computed."""
