"""The network distilled to its kept levels: effective rates, tables of them, and their errors."""
