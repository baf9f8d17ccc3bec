"""The demonstration: a real flow solver, run against a real service, that ends itself when its modes have settled."""
