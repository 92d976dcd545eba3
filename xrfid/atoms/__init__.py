"""Lines, edges, yields and absorption of the elements: the only folder that asks the atomic data libraries."""
