"""What a night says: fringes, decay, and how sure. Pure functions of arrays."""
