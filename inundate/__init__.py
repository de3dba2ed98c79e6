"""inundate: daily inundated area with honest uncertainty for every wetland of a landscape.

Imports run one way, down this list: common, scenes, leaves, pixels, extent, stage, relation, series, skill, products,
batch, reserve, cli.
"""

__version__ = "0.1.0"
