"""The invented scenario: a parcel network, its damage-photo classifier, and the camera that spoils one depot."""
