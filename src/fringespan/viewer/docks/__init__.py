"""The docks: views of the state, which they change by its methods alone."""
