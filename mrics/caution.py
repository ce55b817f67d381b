"""The one sentence that every command, page and written image carries."""

RESEARCH_ONLY = (
    "Research and protocol development only, not for diagnosis; "
    "site rules and licensed practice decide."
)
NIFTI_DESCRIP = "mrics research only"
