"""The joint estimate: from evidence to averages and dispersity, whatever technique it came from.

`system` stacks the evidence, `engine` maximises and integrates over everything but the shape,
`intervals` turns likelihoods into statements, `joint` puts the estimate together.
"""
