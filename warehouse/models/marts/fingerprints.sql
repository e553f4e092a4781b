-- one row per detector version and result settings that made beats; key fingerprint
SELECT
    fingerprint.*,
    fingerprint.fingerprint = settings.fingerprint AS is_published
FROM lake.fingerprints AS fingerprint
CROSS JOIN programme.settings AS settings
