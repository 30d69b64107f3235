"""OpenRTB 2.6 and 2.5, translated into opportunities and outcomes and back; pure.

The facts come from IAB Tech Lab, "OpenRTB Specification 2.6" and its implementation guide (tag
2.6-202606), and "OpenRTB 3.0" for the code lists; Creative Commons Attribution 3.0.
"""
