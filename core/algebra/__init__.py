"""What a query is: operators, scalars, types, graph walking, notation."""
