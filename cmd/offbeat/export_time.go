package main

import (
	"fmt"
	"strings"
	"time"
)

// parseTime reads a point in time: RFC 3339; a date, with or without a time of
// day; today, yesterday or now; or a length of time before now, -12h. What has
// no zone is in UTC, like all times that are written.
func parseTime(s string, now time.Time) (time.Time, error) {
	const allowed = "a time is 2030-01-02, 2030-01-02T03:04:05Z, yesterday 18:00, or -12h for 12 hours ago"
	t := strings.TrimSpace(s)
	now = now.UTC()
	if rest, ago := strings.CutPrefix(t, "-"); ago {
		d, err := parseSpan(rest)
		if err != nil {
			return time.Time{}, fmt.Errorf("%s: %s", quoted(s), allowed)
		}
		return now.Add(-d), nil
	}
	day, rest, _ := strings.Cut(t, " ")
	midnight := time.Date(now.Year(), now.Month(), now.Day(), 0, 0, 0, 0, time.UTC)
	switch day {
	case "now":
		if rest == "" {
			return now, nil
		}
	case "today":
		t = midnight.Format(time.DateOnly) + " " + rest
	case "yesterday":
		t = midnight.AddDate(0, 0, -1).Format(time.DateOnly) + " " + rest
	}
	t = strings.TrimSpace(t)
	for _, layout := range []string{time.RFC3339, "2006-01-02 15:04:05Z07:00", time.DateOnly, "2006-01-02 15:04", time.DateTime,
		"2006-01-02T15:04", "2006-01-02T15:04:05"} {
		if at, err := time.Parse(layout, t); err == nil {
			return at.UTC(), nil
		}
	}
	return time.Time{}, fmt.Errorf("%s: %s", quoted(s), allowed)
}
