package alert

import (
	"testing"
	"time"

	"midwatch/configs"
)

// TestOnePageANightPerPerson: routes say by hours who is on call; the limit of the
// night is that of the person, over all ways to reach them.
func TestOnePageANightPerPerson(t *testing.T) {
	phone, sam := &fakeSender{}, &fakeSender{}
	all := [7]bool{true, true, true, true, true, true, true}
	r := newRig(t, func(s *Settings) {
		s.Advise.Senders = append(s.Advise.Senders, configs.Sender{Name: "phone", Command: &configs.Command{}}, configs.Sender{Name: "sam", Mail: &configs.Mail{}})
		s.Senders["phone"], s.Senders["sam"] = phone, sam
		early, late := []configs.Hours{{Days: all, From: 0, To: 18 * 60}}, []configs.Hours{{Days: all, From: 18 * 60, To: 24 * 60}}
		s.Advise.Routes = []configs.Route{
			{To: []string{"mail"}, Hours: late, Person: "Jo"},
			{To: []string{"phone"}, Hours: late, Person: "Jo"},
			{To: []string{"sam"}, Hours: early, Person: "Sam"}}
	})
	count := func(mail, phoned, toSam int) {
		t.Helper()
		if a, b, c := len(r.mail.take()), len(phone.take()), len(sam.take()); a != mail || b != phoned || c != toSam {
			t.Errorf("%d by mail, %d by phone, %d to Sam; want %d, %d, %d", a, b, c, mail, phoned, toSam)
		}
	}
	r.hear(urgent("AIC-204", at(night)))
	r.run(night)
	count(1, 1, 0) // one trouble, both ways
	r.hear(urgent("PIC-120", at(night)+40))
	r.run(night.Add(40 * time.Minute))
	count(0, 0, 0) // held back: the page of this night was sent
	r.hear(urgent("TIC-401", at(night)+120))
	r.run(night.Add(2 * time.Hour))
	count(0, 0, 1) // past midnight another is on call
	r.hear(urgent("FIC-311", at(night)+24*60))
	r.run(night.Add(24 * time.Hour))
	if len(r.mail.take()) == 0 || len(phone.take()) == 0 {
		t.Error("nothing in the next night")
	}
}
