"""Conditioning: from readings as the historian has them to values on a uniform grid."""
