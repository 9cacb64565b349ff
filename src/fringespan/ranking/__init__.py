"""Which crystal, seen along which zone axis: hypotheses for the peaks of a region, and what follows from one."""
