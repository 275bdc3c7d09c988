package page

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"

	"midwatch/alert"
)

// who is the name that goes into the journal: of the token, else as given.
func who(r *http.Request) (string, error) {
	if n := VisitorOf(r.Context()).Name; n != "" {
		return n, nil
	}
	n := strings.TrimSpace(r.PostFormValue("who"))
	if n == "" {
		return "", badRequest{errors.New("no name was given; hint: say who you are, it goes into the journal")}
	}
	return n, nil
}

// signed puts the name of the token into what a program asks for: nobody signs
// for another.
func signed(next http.Handler) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		name := VisitorOf(r.Context()).Name
		if r.Method != http.MethodPost || name == "" {
			next.ServeHTTP(w, r)
			return
		}
		b, err := io.ReadAll(r.Body)
		if err != nil {
			http.Error(w, "the request cannot be read; hint: it has up to 64 KiB", http.StatusRequestEntityTooLarge)
			return
		}
		var fields map[string]json.RawMessage
		if len(b) > 0 && json.Unmarshal(b, &fields) == nil && fields != nil {
			for k := range fields {
				if strings.EqualFold(k, "who") {
					delete(fields, k)
				}
			}
			// A string always has a form in JSON, and so has what was read from it.
			fields["who"], _ = json.Marshal(name)
			b, _ = json.Marshal(fields)
		}
		r.Body, r.ContentLength = io.NopCloser(bytes.NewReader(b)), int64(len(b))
		next.ServeHTTP(w, r)
	})
}

func (p *Page) acknowledge(w http.ResponseWriter, r *http.Request) {
	id := r.PathValue("id")
	name, err := who(r)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	var until time.Time
	if h := r.PostFormValue("hours"); h != "" {
		d, err := readHours(h)
		if err != nil {
			p.answer(w, r, err)
			return
		}
		until = p.o.Clock().Add(d)
	}
	if err := p.o.House.Acknowledge(id, name, r.PostFormValue("why"), until); err != nil {
		p.refused(w, r, err)
		return
	}
	p.audit(r, "acknowledged", name, "episode", id)
	p.done(w, r, "acknowledged")
}

func (p *Page) shelve(w http.ResponseWriter, r *http.Request) {
	name, err := who(r)
	if err == nil {
		var d time.Duration
		if d, err = readHours(r.PostFormValue("hours")); err == nil {
			if err = p.o.House.Shelve(loopName(r), name, r.PostFormValue("why"), p.o.Clock().Add(d)); err != nil {
				p.refused(w, r, err)
				return
			}
		}
	}
	if err != nil {
		p.answer(w, r, err)
		return
	}
	p.audit(r, "shelved", name, "loop", loopName(r))
	p.done(w, r, "shelved")
}

func (p *Page) unshelve(w http.ResponseWriter, r *http.Request) {
	name, err := who(r)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	if err := p.o.House.Unshelve(loopName(r), name, r.PostFormValue("why")); err != nil {
		p.refused(w, r, err)
		return
	}
	p.audit(r, "unshelved", name, "loop", loopName(r))
	p.done(w, r, "unshelved")
}

// note keeps what somebody has to say of a loop, such as its tuning as left.
func (p *Page) note(w http.ResponseWriter, r *http.Request) {
	name, err := who(r)
	if err != nil {
		p.answer(w, r, err)
		return
	}
	if err := p.o.House.Note(loopName(r), name, r.PostFormValue("why")); err != nil {
		p.refused(w, r, err)
		return
	}
	p.audit(r, "noted", name, "loop", loopName(r))
	p.done(w, r, "noted")
}

func readHours(s string) (time.Duration, error) {
	h, err := strconv.ParseFloat(s, 64)
	if err != nil || !(h > 0) || h > alert.MaxShelf.Hours() {
		return 0, badRequest{fmt.Errorf("for how long: %q; hint: hours above 0 and up to %.0f", cutText(s, 20), alert.MaxShelf.Hours())}
	}
	return time.Duration(h * float64(time.Hour)), nil
}

func (p *Page) audit(r *http.Request, what, name, key, value string) {
	p.o.Log.Info(what, "audit", true, "who", name, "from", remote(r), key, value)
}

// refused answers with what the desk said: the asker can mend it.
func (p *Page) refused(w http.ResponseWriter, r *http.Request, err error) {
	if errors.Is(err, alert.ErrUnknown) {
		p.notFound(w, r, strings.Split(err.Error(), "; hint: ")[0])
		return
	}
	p.answer(w, r, badRequest{err})
}

// done goes back to the view the form stood in.
func (p *Page) done(w http.ResponseWriter, r *http.Request, what string) {
	to := r.PostFormValue("to")
	if to == "" {
		to = "./"
	}
	to = up(r) + strings.TrimPrefix(backTo(to), "./")
	if u, err := url.Parse(to); err == nil {
		q := u.Query()
		q.Set("done", what)
		u.RawQuery = q.Encode()
		to = u.String()
	}
	if to == "" {
		to = "./"
	}
	seeOther(w, to)
}
