"""The cautions that stand on every page, report, export and help text, in one place."""

PURPOSE = (
    "For research and quality work on exported recordings. Not for diagnosis and not an alarm: urgent rhythms may be "
    "found days late or not at all. A clinician over-reads every finding; licensed practice and local rules come first."
)
LABELS = (
    "Automatic labels from one lead can mistake aberrant conduction, bundle-branch block, pacing and noise for "
    "ventricular beats. Look at the strips and at the time not analysed before believing a number."
)
BENEFIT = "Fewer ectopic beats is not the same as a better outcome: suppression alone has not been shown to be benefit."
THRESHOLDS = "Published thresholds disagree; they are drawn as reference lines and are never a verdict."
PRIVACY = "Pseudonymised data are still personal health data; a long ECG may itself identify a person."

CAUTIONS = (PURPOSE, LABELS, BENEFIT, THRESHOLDS, PRIVACY)
