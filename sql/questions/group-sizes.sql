-- How large are the groups?
-- $grade GRADE = 'key': grade of the groups
SELECT records AS records_in_group,
       count(*) AS groups,
       sum(records)::BIGINT AS records,
       sum(records)::BIGINT - count(*) AS set_aside
FROM (SELECT group_id, count(*) AS records FROM members WHERE grade = $grade GROUP BY group_id)
GROUP BY records_in_group
ORDER BY records_in_group
