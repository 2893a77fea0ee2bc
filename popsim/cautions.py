"""The cautions that go with every summary, report and record."""

CAUTIONS = (
    "A simulation for appraising protocols, not for dosing a person.",
    "It is only as good as the published models: built on few people, often healthy, seldom old or obese.",
    "Intervals show the luck of drawing virtual patients; they say nothing about the model's error.",
    "Follow the product's label, local protocols and a licensed clinician's judgement.",
)
