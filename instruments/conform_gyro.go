package instruments

import (
	"context"
	"errors"
	"fmt"
	"time"

	"proofrate/limits/quantity"
)

// CheckGyro exercises g, which must be powered and send samples, and lists all that breaks the contract of Gyro. It
// takes about ten seconds of c's time.
func CheckGyro(ctx context.Context, c Clock, g Gyro) []Finding {
	return conform(ctx, c, g, gyroRules, nil) // no rule moves a gyro
}

var gyroRules = []rule[Gyro]{
	{"channels", false, gyroChannels},
	{"samples", false, gyroSamples},
	{"no wait", false, gyroDrainsAtOnce},
	{"append", false, gyroAppends},
	{"restart", false, gyroRestarts},
	{"readings", false, gyroReads},
	{"unknown reading", false, func(ctx context.Context, _ Clock, g Gyro) error { return knowsItsReadings(ctx, g) }},
}

// gyroChannels: each channel has a name of its own and a count that is a positive rate or angle.
func gyroChannels(_ context.Context, _ Clock, g Gyro) error {
	seen := map[string]bool{}
	for _, channel := range g.Channels() {
		d := channel.Count.Dimension()
		switch {
		case channel.Name == "" || seen[channel.Name]:
			return fmt.Errorf("channel name %q is empty or given twice", channel.Name)
		case d != quantity.AngularRate && d != quantity.Angle:
			return fmt.Errorf("channel %s: a count of %v is neither a rate nor an angle", channel.Name, channel.Count)
		case !(channel.Count.Number > 0):
			return fmt.Errorf("channel %s: a count of %v is not positive", channel.Name, channel.Count)
		}
		seen[channel.Name] = true
	}
	if len(seen) == 0 {
		return errors.New("there is no channel")
	}
	return nil
}

// gather drains once a tenth of a second for d.
func gather(ctx context.Context, c Clock, g Gyro, batch *Batch, d time.Duration) error {
	for until := c.Now().Add(d); c.Now().Before(until); {
		if err := c.Sleep(ctx, pollEvery); err != nil {
			return err
		}
		if err := g.Drain(ctx, batch); err != nil {
			return err
		}
	}
	return nil
}

// gyroSamples: samples come, of one shape, and the counter counts each of them and each lost frame.
func gyroSamples(ctx context.Context, c Clock, g Gyro) error {
	var batch Batch
	if err := g.Drain(ctx, &batch); err != nil {
		return err
	}
	var next uint64
	for range 4 {
		batch.Reset()
		if err := gather(ctx, c, g, &batch, time.Second/2); err != nil {
			return err
		}
		if batch.Len() == 0 {
			return errors.New("no sample in half a second; is the gyro powered and started?")
		}
		if len(batch.Counts) != len(g.Channels()) {
			return fmt.Errorf("%d rows of counts for %d channels", len(batch.Counts), len(g.Channels()))
		}
		for _, row := range batch.Counts {
			if len(row) != batch.Len() {
				return fmt.Errorf("channels of %d and %d samples in one batch", len(row), batch.Len())
			}
		}
		lost, inside := uint64(0), uint64(0)
		for _, gap := range batch.Gaps {
			if gap.Before < 0 || gap.Before > batch.Len() || gap.Lost == 0 {
				return fmt.Errorf("a gap of %d frames before sample %d of %d", gap.Lost, gap.Before, batch.Len())
			}
			if lost += gap.Lost; gap.Before > 0 {
				inside += gap.Lost
			}
		}
		ahead := lost - inside // a gap before the first sample lies between the batches
		if next != 0 && batch.First != next+ahead {
			return fmt.Errorf("a batch starts at counter %d; the one before ended at %d and %d frames were lost", batch.First, next, ahead)
		}
		next = batch.First + uint64(batch.Len()) + inside
		if batch.Arrived.IsZero() || batch.Arrived.After(c.Now()) {
			return fmt.Errorf("the newest frame arrived at %v, and now it is %v", batch.Arrived, c.Now())
		}
	}
	return nil
}

// gyroDrainsAtOnce: a drain with nothing to take returns nothing, at once.
func gyroDrainsAtOnce(ctx context.Context, c Clock, g Gyro) error {
	var batch Batch
	for range 3 {
		before := c.Now()
		if err := g.Drain(ctx, &batch); err != nil {
			return err
		}
		if took := c.Now().Sub(before); took > pollEvery {
			return fmt.Errorf("a drain took %v", took)
		}
	}
	return nil
}

// gyroAppends: a drain adds to the batch and leaves what is there.
func gyroAppends(ctx context.Context, c Clock, g Gyro) error {
	var batch Batch
	if err := gather(ctx, c, g, &batch, time.Second/2); err != nil {
		return err
	}
	if batch.Len() == 0 {
		return skip("no sample came")
	}
	first, length, counts := batch.First, batch.Len(), append([]int64(nil), batch.Counts[0]...)
	if err := gather(ctx, c, g, &batch, time.Second/2); err != nil {
		return err
	}
	if batch.Len() <= length || batch.First != first {
		return fmt.Errorf("of %d samples from counter %d there are %d from %d after another drain", length, first, batch.Len(), batch.First)
	}
	for i, count := range counts {
		if batch.Counts[0][i] != count {
			return fmt.Errorf("another drain changed sample %d from %d to %d", i, count, batch.Counts[0][i])
		}
	}
	return nil
}

// gyroRestarts: what arrived before a restart is forgotten, and what comes after is no gap.
func gyroRestarts(ctx context.Context, c Clock, g Gyro) error {
	const wait = 2 * time.Second
	var batch Batch
	if err := g.Drain(ctx, &batch); err != nil {
		return err
	}
	if err := gather(ctx, c, g, &batch, wait); err != nil {
		return err
	}
	expected := batch.Len()
	if err := c.Sleep(ctx, wait); err != nil {
		return err
	}
	batch.Reset()
	g.Restart()
	if err := g.Drain(ctx, &batch); err != nil {
		return err
	}
	if batch.Len() > expected/4 {
		return fmt.Errorf("%d samples of before the restart were still given", batch.Len())
	}
	batch.Reset()
	if err := gather(ctx, c, g, &batch, wait); err != nil {
		return err
	}
	if batch.Len() < expected/2 {
		return fmt.Errorf("%d samples in %v after the restart, where %d came before it", batch.Len(), wait, expected)
	}
	if len(batch.Gaps) > 0 && batch.Gaps[0].Before == 0 {
		return fmt.Errorf("what the restart forgot is reported as a gap of %d frames", batch.Gaps[0].Lost)
	}
	return nil
}

// gyroReads: the newest frame's readings can be had, at the frame's own time and for no request.
func gyroReads(ctx context.Context, c Clock, g Gyro) error {
	var batch Batch
	if err := gather(ctx, c, g, &batch, time.Second); err != nil {
		return err
	}
	for _, name := range g.Readings() {
		before := c.Now()
		reading, err := Read(ctx, g, name)
		if err != nil {
			return fmt.Errorf("%s: %w", name, err)
		}
		if _, err := inUnitOf(name, reading.Value); err != nil {
			return err
		}
		now := c.Now()
		if reading.Name != name || reading.At.After(now) || now.Sub(reading.At) > time.Second {
			return fmt.Errorf("asked for %s at %v and was given %s of %v", name, now, reading.Name, reading.At)
		}
		if took := now.Sub(before); took > pollEvery {
			return fmt.Errorf("%s took %v; a frame's reading costs no request", name, took)
		}
	}
	return nil
}
