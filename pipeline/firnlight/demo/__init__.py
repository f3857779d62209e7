"""The invented Morrowfell area: a forward model that keeps its truth."""
