"""What the EHR sent, in whatever form, as a LocalRecord: fields with their position, nothing interpreted."""
