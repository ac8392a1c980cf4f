package bench

import (
	"context"
	"errors"
	"fmt"
	"slices"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/instruments/profile"
	"proofrate/instruments/virtual"
)

// Opened is a bench whose links are open and whose instruments have said who they are.
type Opened struct {
	*instruments.Bench
	World *virtual.World // nil if the links lead out of the program
	links []link.Link    // in the order of their opening
}

// Open opens the links of a bench in the order of its file and identifies its instruments. On a virtual bench the seed
// gives everything that is drawn. It closes what it has opened if anything fails.
func Open(ctx context.Context, l *Loaded, seed uint64) (*Opened, error) {
	o := &Opened{Bench: &instruments.Bench{Description: l.Description}}
	err := o.open(ctx, l, seed)
	if err != nil {
		return nil, errors.Join(err, o.Close())
	}
	return o, nil
}

func (o *Opened) open(ctx context.Context, l *Loaded, seed uint64) error {
	connect, err := o.connector(l, seed)
	if err != nil {
		return err
	}
	wired := map[string]wire{}
	for _, i := range l.instruments {
		at, err := connect(ctx, i)
		if err != nil {
			return failed("open", i.name, err)
		}
		o.links = append(o.links, at)
		// A profile shares what it knows of a link among its drivers, so that each opening has its own.
		own, _, wrong := profile.Load(i.profile.Name, i.profile.Text)
		if err := wrong.Err(); err != nil {
			return failed("open", i.name, err)
		}
		wired[i.name] = wire{i.name, at, own}
	}
	if err := o.drivers(l, wired); err != nil {
		return err
	}
	return o.identify(ctx, l)
}

// wire is an instrument at its open link.
type wire struct {
	name    string
	link    link.Link
	profile *profile.Profile
}

// World makes the virtual world behind a bench; the seed gives everything that is drawn.
func World(l *Loaded, seed uint64) (*virtual.World, error) {
	if l.world == nil {
		return nil, fmt.Errorf("bench %s is no virtual one", l.Description.Name)
	}
	config := *l.world
	config.Seed = seed
	return virtual.New(config)
}

// connector is how the links of this bench are opened; it starts the bench's clock.
func (o *Opened) connector(l *Loaded, seed uint64) (func(context.Context, *instrument) (link.Link, error), error) {
	if l.world != nil {
		world, err := World(l, seed)
		if err != nil {
			return nil, err
		}
		o.World, o.Clock = world, world
		return func(_ context.Context, i *instrument) (link.Link, error) { return world.Link(i.link.place) }, nil
	}
	clock := link.ScaledClock(l.Description.Pace)
	o.Clock = clock
	return func(ctx context.Context, i *instrument) (link.Link, error) {
		if i.link.scheme == "tcp" {
			return link.DialTCP(ctx, i.link.place, clock)
		}
		return link.OpenSerial(ctx, i.link.place, i.profile.Serial, clock)
	}, nil
}

// drivers makes the instruments of the bench, one a role that is filled.
func (o *Opened) drivers(l *Loaded, wired map[string]wire) error {
	d := l.Description
	var err error
	if d.Table != nil {
		w := wired[d.Table.Instrument]
		if o.Table, err = w.profile.Table(w.link, w.name); err != nil {
			return failed("make the table's driver", w.name, err)
		}
	}
	if d.Chamber != nil {
		w := wired[d.Chamber.Instrument]
		if o.Chamber, err = w.profile.Chamber(w.link, w.name); err != nil {
			return failed("make the chamber's driver", w.name, err)
		}
	}
	for _, s := range d.Slots {
		slot := instruments.Slot{ID: s.ID, Meters: map[string]instruments.Instrument{}}
		w := wired[s.Gyro]
		if slot.Gyro, err = w.profile.Gyro(w.link, w.name); err != nil {
			return failed("make the gyro's driver", w.name, err)
		}
		w = wired[s.Supply]
		if slot.Supply, err = w.profile.Supply(w.link, w.name, s.SupplyChannel); err != nil {
			return failed("make the supply's driver", w.name, err)
		}
		for _, name := range l.meters[s.ID] {
			w = wired[name]
			if slot.Meters[name], err = w.profile.Meter(w.link, w.name); err != nil {
				return failed("make the meter's driver", w.name, err)
			}
		}
		o.Slots = append(o.Slots, slot)
	}
	return nil
}

// identify asks every instrument that can be asked who it is, in the order of the file; a gyro only streams.
func (o *Opened) identify(ctx context.Context, l *Loaded) error {
	askable := map[string]instruments.Instrument{}
	if o.Table != nil {
		askable[l.Description.Table.Instrument] = o.Table
	}
	if o.Chamber != nil {
		askable[l.Description.Chamber.Instrument] = o.Chamber
	}
	for at, slot := range o.Slots {
		askable[l.Description.Slots[at].Supply] = slot.Supply
		for name, meter := range slot.Meters {
			askable[name] = meter
		}
	}
	for _, i := range l.instruments {
		one, ok := askable[i.name]
		if !ok {
			continue
		}
		id, err := one.Identify(ctx)
		if err != nil {
			return failed("identify", i.name, err)
		}
		o.Identities = append(o.Identities, instruments.Identified{Name: i.name, Identity: id})
	}
	return nil
}

// Close closes the links, in the reverse of the order of their opening.
func (o *Opened) Close() error {
	var errs []error
	for _, l := range slices.Backward(o.links) {
		errs = append(errs, l.Close())
	}
	o.links = nil
	return errors.Join(errs...)
}

// failed adds the instrument to an error that does not name it yet.
func failed(op, instrument string, err error) error {
	if known, ok := errors.AsType[*instruments.Error](err); ok {
		if known.Where.Instrument == instrument {
			return err
		}
		return &instruments.Error{Op: op, Where: instruments.Where{Instrument: instrument}, Kind: known.Kind, Err: err}
	}
	kind := instruments.Internal
	if _, gone := errors.AsType[*link.GoneError](err); gone {
		kind = instruments.Gone
	}
	return &instruments.Error{Op: op, Where: instruments.Where{Instrument: instrument}, Kind: kind, Err: err}
}
