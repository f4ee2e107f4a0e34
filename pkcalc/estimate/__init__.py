"""Estimates of one patient's Vmax and Km: from two steady levels, from many, or from the whole record."""
