"""From inputs to records to layers: survey, tiles, schedule, merge, assembly."""
