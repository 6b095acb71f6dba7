"""From the clinic's fields to findings: template maps, how they are read, and how they are applied."""
