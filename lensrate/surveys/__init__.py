"""What a survey sees: efficiency, campaigns, mass measurements, maps, the spread over assumptions."""
