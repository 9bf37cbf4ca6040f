"""From a directed vessel graph to orders, elements, Horton's laws and the law of branching.

Rooting (`root`, `labels`), topological orders (`strahler`), diameter-defined orders
(`diameter_orders`), elements and their connectivity (`elements`), Horton's laws (`horton`),
junctions (`junction_law`, `exponent`, `pooled_exponent`, `angles`), taper (`taper`). All but the
first and the last three also work on plain arrays: one parent segment and one diameter a segment.
"""
