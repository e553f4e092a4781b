-- one row per patient and local day with beats in three or more clock hours; key patient_code, local_day
-- 95 % interval of the day's ventricular burden from the scatter of its own clock hours: counting and change from hour
-- to hour, nothing of the change from day to day. An over-dispersed binomial: the dispersion is the largest of 1, Pearson's
-- chi-square over its degrees of freedom (McCullagh and Nelder 1989, section 4.5), and the same with the products of
-- hours up to three apart, as ectopy comes in waves (Newey and West 1987, doi:10.2307/1913610, Bartlett weights, with
-- n / (n - 1)). The interval is Wilson's (doi:10.1080/01621459.1927.10502953) on the beats over the dispersion, with
-- Student's t in place of the normal value. Waves longer than some hours still leave it too narrow.
WITH hours AS (
    SELECT
        patient_code,
        local_day,
        clock_hour,
        v_beats,
        all_beats,
        sum(v_beats) OVER day / sum(all_beats) OVER day AS share
    FROM anew.local_hours
    WHERE all_beats > 0
    WINDOW day AS (PARTITION BY patient_code, local_day)
),

excess AS (
    SELECT
        *,
        v_beats - share * all_beats AS more,
        all_beats * share * (1 - share) AS by_counting
    FROM hours
),

neighbours AS (
    SELECT
        *,
        coalesce(sum(more) OVER (day RANGE BETWEEN 1 PRECEDING AND 1 PRECEDING), 0) AS more_1_h_ago,
        coalesce(sum(more) OVER (day RANGE BETWEEN 2 PRECEDING AND 2 PRECEDING), 0) AS more_2_h_ago,
        coalesce(sum(more) OVER (day RANGE BETWEEN 3 PRECEDING AND 3 PRECEDING), 0) AS more_3_h_ago
    FROM excess
    WINDOW day AS (PARTITION BY patient_code, local_day ORDER BY clock_hour)
),

scatter AS (
    SELECT
        patient_code,
        local_day,
        any_value(share) AS share,
        sum(all_beats) AS beats,
        count(*) - 1 AS freedom,
        -- Fractions are added in the order of the hours, so that the sum is the same to the last bit in every build.
        sum(more ** 2 / nullif(by_counting, 0) ORDER BY clock_hour) / (count(*) - 1) AS of_hours,
        count(*) / (count(*) - 1) * sum(
            more * (more + 2 * (0.75 * more_1_h_ago + 0.5 * more_2_h_ago + 0.25 * more_3_h_ago)) ORDER BY clock_hour
        ) / nullif(sum(by_counting ORDER BY clock_hour), 0) AS of_waves
    FROM neighbours
    GROUP BY patient_code, local_day
    HAVING count(*) >= 3
),

spread AS (
    SELECT
        *,
        -- 97.5 % value of Student's t from the normal one: Abramowitz and Stegun 26.7.5, four terms
        (1.959964 + 2.372271 / freedom + 2.822498 / freedom ** 2 + 2.555852 / freedom ** 3) ** 2
        * greatest(1, of_hours, of_waves) / beats AS t2
    FROM scatter
)

SELECT
    patient_code,
    local_day,
    100 * greatest(0, (share + t2 / 2 - sqrt(t2 * share * (1 - share) + t2 ** 2 / 4)) / (1 + t2)) AS v_burden_low_pct,
    100 * least(1, (share + t2 / 2 + sqrt(t2 * share * (1 - share) + t2 ** 2 / 4)) / (1 + t2)) AS v_burden_high_pct
FROM spread
