"""Netlists of the divider, their faults, and the tables made from what ngspice says."""
