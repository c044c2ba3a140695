"""Injected electrode faults over real background: is the technologist advised well?"""
