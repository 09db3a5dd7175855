"""The cautions that go with whatever tells someone to listen or to solder."""

CAUTIONS = (
    "Ears: start quietly. Feedback and jumps in level are loud in headphones; turn up slowly.",
    "Supply: check the polarity before the first power-up; use a battery or an isolated adaptor. "
    "Anything fed from the mains is for licensed practice and local codes.",
    "Bench: the iron burns, fumes want air moving away from you, solder may hold lead (wash your "
    "hands), and a gate does not survive static: touch ground first.",
    "A prediction is not a measurement: measure the gate bus of the finished unit, and let your "
    "ears decide.",
)
