"""From a method, a bench, a sample and what is in force to a plan, and from its result to an amount."""
