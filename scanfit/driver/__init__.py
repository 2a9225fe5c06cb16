"""The driver owns a scan: it feeds explorers, archives points, obeys stop rules and signals, and writes the results."""
