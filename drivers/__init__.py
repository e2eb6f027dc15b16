"""Everything that speaks to a bench: links, dialects, drivers of the four roles, and the simulated bench."""
