-- one row per patient and local day with beats in three or more clock hours; key patient_code, local_day
-- 95 % interval of the day's ventricular burden from the scatter of its own clock hours: counting and change from hour
-- to hour, nothing of the change from day to day. An over-dispersed binomial: the dispersion is Pearson's chi-square over
-- its degrees of freedom, never below 1 (McCullagh and Nelder 1989, section 4.5); the interval is Wilson's
-- (doi:10.1080/01621459.1927.10502953) on the beats over the dispersion, with Student's t in place of the normal value.
-- Hours are taken as independent; where ectopy comes in long waves the interval is too narrow.
WITH hours AS (
    SELECT
        patient_code,
        local_day,
        clock_hour,
        v_beats,
        all_beats,
        sum(v_beats) OVER day / sum(all_beats) OVER day AS share
    FROM local_hours
    WHERE all_beats > 0
    WINDOW day AS (PARTITION BY patient_code, local_day)
),

scatter AS (
    SELECT
        patient_code,
        local_day,
        any_value(share) AS share,
        count(*) - 1 AS freedom,
        -- Fractions are added in the order of the hours, so that the sum is the same to the last bit in every build.
        sum(all_beats) / greatest(1, sum(
            (v_beats - share * all_beats) ** 2 / nullif(all_beats * share * (1 - share), 0) ORDER BY clock_hour
        ) / (count(*) - 1)) AS effective_beats
    FROM hours
    GROUP BY patient_code, local_day
    HAVING count(*) >= 3
),

spread AS (
    SELECT
        *,
        -- 97.5 % value of Student's t from the normal one: Abramowitz and Stegun 26.7.5, four terms
        (1.959964 + 2.372271 / freedom + 2.822498 / freedom ** 2 + 2.555852 / freedom ** 3) ** 2 / effective_beats AS t2
    FROM scatter
)

SELECT
    patient_code,
    local_day,
    100 * greatest(0, (share + t2 / 2 - sqrt(t2 * share * (1 - share) + t2 ** 2 / 4)) / (1 + t2)) AS v_burden_low_pct,
    100 * least(1, (share + t2 / 2 + sqrt(t2 * share * (1 - share) + t2 ** 2 / 4)) / (1 + t2)) AS v_burden_high_pct
FROM spread
