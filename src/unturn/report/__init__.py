"""One file that a reviewer reads, prints and signs: gathered as plain data first, then laid out."""
