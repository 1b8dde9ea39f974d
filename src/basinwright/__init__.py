"""From terrain to design flood hydrographs for ungauged outlets."""
