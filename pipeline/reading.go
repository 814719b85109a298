package pipeline

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"hash"

	"platen/pipeline/intake"
	"platen/pipeline/run"
)

// Reading is the analysis of one run file, fed with its bytes as they come. A
// growing file and a finished one take this same road. It is not safe for
// concurrent use.
type Reading struct {
	settings Settings
	text     *intake.Text
	sum      hash.Hash
	bytes    int64
	samples  *sampler
	trouble  *run.Trouble
}

// Open starts the analysis of a file; name is its path below the watched
// folder and is used in messages only.
func Open(name string, s Settings) *Reading {
	r := &Reading{settings: s, sum: sha256.New()}
	r.text = intake.NewText(name, intake.Options{Zone: s.zone()}, r.take)
	return r
}

// Feed takes the next bytes of the file, in pieces of any size. It never
// fails: what cannot be read is told by Estimates().Trouble.
func (r *Reading) Feed(p []byte) {
	r.sum.Write(p)
	r.bytes += int64(len(p))
	if r.trouble == nil {
		r.note(r.text.Feed(p))
	}
}

// Bytes returns the number of bytes fed.
func (r *Reading) Bytes() int64 { return r.bytes }

// Completion tells whether the content itself says that the run is complete
// (declared sample count reached, or "# end" seen); run.Growing otherwise.
func (r *Reading) Completion() run.Completion {
	if r.trouble != nil {
		return run.Growing
	}
	return r.text.Complete()
}

// Estimates returns what is known so far. It works on a bounded number of
// points, whatever the length of the run, and may be called after any Feed.
func (r *Reading) Estimates() run.Estimates { return r.estimates(run.Growing) }

// Finish ends the run for the reason given and returns the final estimates
// and the identity of the bytes (SHA-256, hexadecimal). Feed must not be
// called afterwards.
func (r *Reading) Finish(how run.Completion) (est run.Estimates, id string) {
	if r.trouble == nil {
		r.note(r.text.Finish())
	}
	if r.samples != nil {
		r.samples.finish()
	}
	return r.estimates(how), hex.EncodeToString(r.sum.Sum(nil))
}

// take is the sink of the decoder.
func (r *Reading) take(b *run.Block) error {
	if r.samples == nil {
		h, _ := r.text.Header()
		r.samples = newSampler(r.settings, h)
	}
	return r.samples.take(b)
}

// note keeps the first error as the run's trouble.
func (r *Reading) note(err error) {
	if err == nil {
		return
	}
	var bad *intake.Error
	if errors.As(err, &bad) {
		r.trouble = &run.Trouble{Line: bad.Line, Byte: bad.Byte, Want: bad.Want, Got: bad.Got, Fix: bad.Fix, IsRun: bad.IsRun}
		if bad.Column != "" {
			r.trouble.Want += " in column " + bad.Column
		}
		return
	}
	var need *missingError
	if errors.As(err, &need) {
		// It is the header that lacks something: there is no line to name.
		r.trouble = &run.Trouble{Want: need.want, Got: need.got, Fix: need.fix, IsRun: true}
		return
	}
	r.trouble = &run.Trouble{Line: r.text.Line(), Byte: r.text.Byte(), Want: "a run file", Got: err.Error(), Fix: "check the export"}
}

func (r *Reading) estimates(how run.Completion) run.Estimates {
	h, _ := r.text.Header()
	if h.Kind == "" {
		h.Kind = run.KindCell
	}
	e := run.Estimates{
		Header:     h,
		Completion: how,
		NULTail:    r.text.NULTail(),
		Trouble:    r.trouble,
	}
	if r.samples != nil {
		e.Samples = r.samples.taken()
		r.samples.estimate(&e, r.settings)
	}
	return e
}
