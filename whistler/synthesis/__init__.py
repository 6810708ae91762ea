"""Synthetic recordings with known truth, built on the wave level.

Nothing in here uses the travel times that the analyser fits with: whistlers are Fourier integrals
of the refractive index along a path with a quadrature of its own.
"""
