"""Files in and out: tables, cards, studies and result folders."""
