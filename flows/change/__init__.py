"""From hours and periods to the tables that answer "did it change?"."""
