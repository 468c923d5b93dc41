"""Reports: what a person or another program reads of a card."""
