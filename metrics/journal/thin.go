package journal

import (
	"context"
	"fmt"
	"strings"
	"time"

	"offbeat/dsp"
)

// thinMinutes is how many minutes of a bench one transaction thins at most.
const thinMinutes = 12 * 60

// intoMinutes rolls the seconds of a bench between two times into minutes. What
// a later look needs stays: extremes and mean of the beat, its typical
// uncertainty, the phase at both ends with its times, levels, and how many
// seconds were in each state and carried each flag.
var intoMinutes = `INSERT INTO minutes
	SELECT bench, t/60000*60000 AS m, max(setup), count(*), count(coalesce(beat, beat_abs)),
	  avg(beat), min(beat), max(beat), avg(coalesce(abs(beat), beat_abs)), sqrt(avg(beat_u*beat_u)), avg(carrier_tone), avg(local_tone),
	  round(avg(carrier_cdb)), round(avg(local_cdb)), round(avg(carrier_cn0)), round(avg(local_cn0)), avg(spread),
	  (SELECT phase FROM readings p WHERE p.bench = r.bench AND p.t >= r.t/60000*60000 AND p.t < r.t/60000*60000+60000 AND phase IS NOT NULL ORDER BY p.t LIMIT 1),
	  min(CASE WHEN phase IS NOT NULL THEN t END),
	  (SELECT phase FROM readings p WHERE p.bench = r.bench AND p.t >= r.t/60000*60000 AND p.t < r.t/60000*60000+60000 AND phase IS NOT NULL ORDER BY p.t DESC LIMIT 1),
	  max(CASE WHEN phase IS NOT NULL THEN t END),
	  min(run), max(run), round(avg(input_cdb)), sum(clipped),
	  ` + counts("state = %d", len(dsp.States)) + `, ` + counts("flags >> %d & 1", len(dsp.Flags)) + `
	FROM readings r WHERE bench = ?1 AND t >= ?2 AND t < ?3 GROUP BY t/60000`

// counts makes a JSON array of how many rows fulfil a condition, one for each
// number.
func counts(condition string, n int) string {
	parts := make([]string, n)
	for i := range parts {
		parts[i] = "sum(" + fmt.Sprintf(condition, i) + ")"
	}
	return "'[' || " + strings.Join(parts, " || ',' || ") + " || ']'"
}

// thin turns seconds that have grown old into minutes, a batch at a time, each
// in one transaction together with the event that tells of it.
func (j *Journal) thin(now time.Time) {
	if j.opt.ThinAfter < 0 {
		return
	}
	limit := now.Add(-j.opt.ThinAfter).UnixMilli() / 60000 * 60000
	for {
		n, err := j.thinBatch(limit)
		if err != nil {
			j.opt.Log.Error("old seconds could not be thinned; they stay", "file", j.path, "error", err)
			return
		}
		if n == 0 {
			return
		}
	}
}

func (j *Journal) thinBatch(limit int64) (int64, error) {
	ctx := context.Background()
	tx, err := j.db.BeginTx(ctx, nil)
	if err != nil {
		return 0, err
	}
	defer tx.Rollback()
	rows, err := tx.QueryContext(ctx, "SELECT b.id, b.name, (SELECT min(t) FROM readings WHERE bench = b.id) AS first FROM benches b WHERE first < ?", limit)
	if err != nil {
		return 0, err
	}
	type old struct {
		id, first int64
		name      string
	}
	var olds []old
	for rows.Next() {
		var o old
		if err := rows.Scan(&o.id, &o.name, &o.first); err != nil {
			rows.Close()
			return 0, err
		}
		olds = append(olds, o)
	}
	if err := rows.Err(); err != nil {
		return 0, err
	}
	total := int64(0)
	for _, o := range olds {
		from := o.first / 60000 * 60000
		to := min(limit, from+thinMinutes*60000)
		if _, err := tx.ExecContext(ctx, intoMinutes, o.id, from, to); err != nil {
			return 0, err
		}
		res, err := tx.ExecContext(ctx, "DELETE FROM readings WHERE bench = ? AND t >= ? AND t < ?", o.id, from, to)
		if err != nil {
			return 0, err
		}
		n, err := res.RowsAffected()
		if err != nil {
			return 0, err
		}
		total += n
		text := fmt.Sprintf("%d seconds from %s on were thinned to minutes", n, time.UnixMilli(from).UTC().Format(time.RFC3339))
		if _, err := tx.ExecContext(ctx, "INSERT INTO events (bench, at, kind, text, data) VALUES (?,?,?,?,?)", o.id, time.Now().UnixMilli(), Thinned, text,
			fmt.Sprintf(`{"from":%d,"to":%d,"rows":%d}`, from, to, n)); err != nil {
			return 0, err
		}
		j.opt.Log.Info(text, "bench", o.name)
	}
	return total, tx.Commit()
}
