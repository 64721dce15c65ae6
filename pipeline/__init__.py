"""From part poses to a judged pick plan, in the order of the flow:

cell -> arm, belt, places -> follow -> room -> grasp -> motion -> legs -> order -> replay -> tables, plots, page -> app.
Each module imports only from those before it, and from `cameras`, which knows nothing of this package.
"""
