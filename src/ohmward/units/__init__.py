"""Values as people write them: numbers with units, tolerances, ratings, markings, series."""
