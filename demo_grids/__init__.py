"""The invented world of Hollin: climate, crops, districts and responses with a known truth.

Everything here is invented. Nothing in it describes a real place, model or crop estimate.
"""
