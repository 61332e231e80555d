"""Close out a laser-ablation campaign: how much energy did each shot really absorb?"""

__version__ = "0.1.0"
