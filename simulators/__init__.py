"""How the world behaves: solution chemistry, electrode, beaker, syringe, and virtual devices."""
