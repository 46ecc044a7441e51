"""Help, value entry, choosers and the hearing caution."""
