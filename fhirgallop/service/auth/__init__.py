"""Who may do what: CDS clients' tokens, access tokens with scopes, roles of people, foreign pages."""
