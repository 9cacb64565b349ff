"""Crystal structures and what they would show: reflections, absences, zone-axis patterns."""
