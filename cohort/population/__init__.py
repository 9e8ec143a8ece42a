"""Virtual people: laws, correlations, strata, designs and seeds. Knows names and arrays, never bodies."""

from cohort.population.recipe import Recipe, Stratum, Subjects, draw, from_uniforms, population_draw

__all__ = ["Recipe", "Stratum", "Subjects", "draw", "from_uniforms", "population_draw"]
