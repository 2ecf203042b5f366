"""How the bench is spoken to: VISA link, SCPI session, adapters, dialects, the simulated bench."""
