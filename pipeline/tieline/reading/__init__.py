"""Reading tables in any of the accepted formats: bytes in, text cells out. Knows nothing of spots or stages."""
