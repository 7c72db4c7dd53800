"""Compiled kernels: arrays and numbers in, arrays filled."""
