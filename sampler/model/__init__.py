"""Distortion as named terms; one basis for fit, predict, plan and figures."""
