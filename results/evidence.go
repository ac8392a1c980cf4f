package results

import (
	"math"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/procedures"
	"proofrate/results/recording"
)

// The evidence of a run, as its entry has it. Numbers that a void figure lacks are null; an infinite number of degrees
// of freedom is null.

type runEvidence struct {
	Kind         string               `json:"kind"` // "run"
	Station      string               `json:"station"`
	Run          string               `json:"run"`
	Started      string               `json:"started"`
	Procedure    procedureEvidence    `json:"procedure"`
	Bench        benchEvidence        `json:"bench"`
	Operator     string               `json:"operator"`
	Seed         uint64               `json:"seed,string"`
	Build        BuildIdentity        `json:"build"`
	Parameters   []parameterEvidence  `json:"parameters"`
	Instruments  []instrumentEvidence `json:"instruments"`
	Outcome      string               `json:"outcome"`
	Reason       string               `json:"reason"`
	BenchSeconds float64              `json:"bench_seconds"`
	WallSeconds  float64              `json:"wall_seconds"`
	Trials       []trialEvidence      `json:"trials"`
	Events       []Event              `json:"events"`
}

type procedureEvidence struct {
	Name          string `json:"name"`
	Title         string `json:"title"`
	Revision      string `json:"revision"`
	Specification string `json:"specification"`
	Digest        string `json:"digest"`
}

type benchEvidence struct {
	Name   string `json:"name"`
	Digest string `json:"digest"`
}

// BuildIdentity says what program made the figures: bit for bit is promised for equal identity.
type BuildIdentity struct {
	Version      string `json:"version"`
	Go           string `json:"go"`
	Architecture string `json:"architecture"`
}

type parameterEvidence struct {
	Name       string `json:"name"`
	Value      string `json:"value"`
	Overridden bool   `json:"overridden"`
}

type instrumentEvidence struct {
	Name          string                `json:"name"`
	Profile       string                `json:"profile"`
	ProfileDigest string                `json:"profile_digest"`
	Maker         string                `json:"maker"`
	Model         string                `json:"model"`
	Serial        string                `json:"serial"`
	Firmware      string                `json:"firmware"`
	Calibrations  []calibrationEvidence `json:"calibrations"`
}

type calibrationEvidence struct {
	Reading     string  `json:"reading"`
	Certificate string  `json:"certificate"`
	Laboratory  string  `json:"laboratory"`
	Date        string  `json:"date"`
	Due         string  `json:"due"`
	Correction  string  `json:"correction"`
	U           string  `json:"U"`
	K           float64 `json:"k"`
	Drift       string  `json:"drift"`
}

type trialEvidence struct {
	Slot       string              `json:"slot"`
	Part       string              `json:"part"`
	Serial     string              `json:"serial"`
	Verdict    string              `json:"verdict"`
	Reason     string              `json:"reason"`
	Recording  fileEvidence        `json:"recording"`
	Figures    []figureEvidence    `json:"figures"`
	Judgements []judgementEvidence `json:"judgements"`
}

type fileEvidence struct {
	File     string            `json:"file"` // below recordings/
	SHA256   string            `json:"sha256"`
	Bytes    int64             `json:"bytes"`
	Sections []sectionEvidence `json:"sections"`
}

type sectionEvidence struct {
	Name    string                `json:"name"`
	Labels  []recording.LabelJSON `json:"labels"`
	Samples int                   `json:"samples"`
	SHA256  string                `json:"sha256"`
}

type figureEvidence struct {
	Name   string                `json:"name"`
	Labels []recording.LabelJSON `json:"labels"`
	Method string                `json:"method"`
	Value  *float64              `json:"value"`
	Unit   string                `json:"unit"`
	U      *float64              `json:"u"`
	DoF    *float64              `json:"dof"`
	Low    *float64              `json:"low"`
	High   *float64              `json:"high"`
	Family string                `json:"family"`
	Budget []lineEvidence        `json:"budget"`
	Reason string                `json:"reason"`
}

type lineEvidence struct {
	Name         string   `json:"name"`
	Instrument   string   `json:"instrument"`
	Value        float64  `json:"value"`
	U            float64  `json:"u"`
	Sensitivity  float64  `json:"sensitivity"`
	Contribution float64  `json:"contribution"`
	DoF          *float64 `json:"dof"`
}

type judgementEvidence struct {
	Clause      string                `json:"clause"`
	Require     string                `json:"require"`
	Rule        string                `json:"rule"`
	Labels      []recording.LabelJSON `json:"labels"`
	Verdict     string                `json:"verdict"`
	Margin      *float64              `json:"margin"`
	UMargin     *float64              `json:"u_margin"`
	Unit        string                `json:"unit"`
	Probability *float64              `json:"probability"`
	Draws       int                   `json:"draws"`
	Reason      string                `json:"reason"`
}

// Event is something that happened at the bench: rare, stored, the same for equal seeds.
type Event struct {
	At   float64            `json:"at"` // bench s
	Kind string             `json:"kind"`
	Slot instruments.SlotID `json:"slot"`
	Step string             `json:"step"`
	Text string             `json:"text"`
}

// finite gives a number, or null for one that is not.
func finite(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}

// evidenceOf gives what is known when a run begins.
func evidenceOf(start RunStart, id string) runEvidence {
	p, d := start.Plan, start.Description
	e := runEvidence{Kind: "run", Station: d.Station, Run: id, Started: start.Started.UTC().Format(time.RFC3339Nano),
		Procedure: procedureEvidence{p.Name, p.Title, p.Revision, p.Specification, p.Digest},
		Bench:     benchEvidence{d.Name, d.Digest}, Operator: start.Operator, Seed: start.Seed, Build: start.Build,
		Parameters: []parameterEvidence{}, Instruments: []instrumentEvidence{}, Trials: []trialEvidence{}, Events: []Event{}}
	for _, q := range p.Parameters {
		e.Parameters = append(e.Parameters, parameterEvidence{q.Name, q.Value.String(), q.Overridden})
	}
	for _, i := range d.Instruments {
		one := instrumentEvidence{Name: i.Name, Profile: i.Profile, ProfileDigest: i.ProfileDigest, Calibrations: []calibrationEvidence{}}
		for _, known := range start.Identities {
			if known.Name == i.Name {
				one.Maker, one.Model, one.Serial, one.Firmware = known.Identity.Maker, known.Identity.Model, known.Identity.Serial, known.Identity.Firmware
			}
		}
		for _, c := range i.Calibrations {
			one.Calibrations = append(one.Calibrations, calibrationEvidence{c.Reading, c.Certificate, c.Laboratory, c.Date, c.Due,
				c.Correction.String(), c.U.String(), c.K, c.Drift.String()})
		}
		e.Instruments = append(e.Instruments, one)
	}
	for _, t := range start.Trials {
		e.Trials = append(e.Trials, trialEvidence{Slot: string(t.Slot), Part: t.Part, Serial: t.Serial,
			Figures: []figureEvidence{}, Judgements: []judgementEvidence{}})
	}
	return e
}

// evaluated adds a trial's figures and judgements.
func (t *trialEvidence) evaluated(e *procedures.Evaluation) {
	t.Verdict = e.Verdict.String()
	for _, f := range e.Figures {
		t.Figures = append(t.Figures, figureOf(f.Name, f.Labels, f.Method, f.Measured))
	}
	for _, j := range e.Judgements {
		t.Judgements = append(t.Judgements, judgementEvidence{Clause: j.Clause, Require: j.Require, Rule: j.Rule, Labels: j.Labels.JSON(),
			Verdict: j.Verdict.String(), Margin: finite(j.Margin), UMargin: finite(j.UMargin), Unit: j.Unit.String(),
			Probability: finite(j.Probability), Draws: j.Draws, Reason: j.Reason})
	}
}

func figureOf(name string, labels recording.Labels, method string, m quantity.Measured) figureEvidence {
	f := figureEvidence{Name: name, Labels: labels.JSON(), Method: method, Value: finite(m.Value), Unit: m.Unit.String(), U: finite(m.U),
		DoF: finite(m.DoF), Low: finite(m.Low), High: finite(m.High), Family: string(m.Family), Budget: []lineEvidence{}, Reason: m.Void}
	for _, l := range m.Budget {
		f.Budget = append(f.Budget, lineEvidence{l.Name, l.Instrument, l.Value, l.U, l.Sensitivity, l.Contribution, finite(l.DoF)})
	}
	return f
}

// stored adds what proves a trial's recordings.
func (t *trialEvidence) stored(file string, s recording.Seal) {
	t.Recording = fileEvidence{File: file, SHA256: s.SHA256, Bytes: s.Bytes, Sections: []sectionEvidence{}}
	for _, section := range s.Sections {
		t.Recording.Sections = append(t.Recording.Sections, sectionEvidence{section.Name, section.Labels.JSON(), section.Samples, section.SHA256})
	}
}

// labelText is labels in words, as the tables have them.
func labelText(list []recording.LabelJSON) string {
	_, words := told(list)
	return words
}
