"""The commands, each file those of one kind of question; `monitor/cli.py` gathers them."""
