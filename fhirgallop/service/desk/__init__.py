"""The informatician's desk: what stands behind its pages, from a foreign form to a published map."""
