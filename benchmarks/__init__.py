"""How fast the library is, always against an opponent that does the same work.

``python -m benchmarks`` runs everything, prints a table and writes the raw times to ``benchmarks/results``;
``python -m benchmarks --only import_time generated_call`` runs some. Each benchmark is one module, whose docstring says
what is compared, why, and what the floor is; the opponents are in `benchmarks.opponents`.

A ratio is the median over rounds; in each round library and opponent run one after the other in the same process, so
that a machine that slows down slows both. No figure depends on the absolute speed of the machine, and nothing fails
because of a time: a target is printed beside the ratio that was measured. Results of both sides are compared before
any time is taken.
"""
