package access_test

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"testing"
	"time"

	"golang.org/x/crypto/bcrypt"

	"throatwatch/dashboard/access"
)

const (
	password = "nine grey herons stand"
	other    = "two wet oars by the lock"
	here     = "192.0.2.7" // RFC 5737
)

var began = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)

func people(t *testing.T) *access.Users {
	t.Helper()
	u := &access.Users{Cost: bcrypt.MinCost}
	for name, role := range map[string]access.Role{"Mo Oduya": access.Operator, "Vera Lindqvist": access.Viewer, "Edda Marsh": access.Engineer} {
		if err := u.Add(name, role, password); err != nil {
			t.Fatal(err)
		}
	}
	return u
}

func signIn(t *testing.T, g *access.Gate, name, password string, now time.Time) access.Session {
	t.Helper()
	s, err := g.SignIn(t.Context(), name, password, here, now)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// The file gives back what it was made of, and holds no secret.
func TestUsersFile(t *testing.T) {
	u := people(t)
	token, err := u.AddMachine("prometheus", access.Viewer)
	if err != nil || len(token) < 50 {
		t.Fatalf("token %q, %v", token, err)
	}
	text, err := u.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	for _, secret := range []string{password, token, strings.TrimPrefix(token, "throatwatch-")} {
		if bytes.Contains(text, []byte(secret)) {
			t.Errorf("the file shows %q:\n%s", secret, text)
		}
	}
	again, err := access.Parse(text)
	if err != nil {
		t.Fatal(err)
	}
	if a, b := fmt.Sprint(u.List()), fmt.Sprint(again.List()); a != b || len(again.List()) != 4 {
		t.Errorf("written %s, read %s", a, b)
	}
	if strings.Contains(fmt.Sprint(again.List()), "$2a$") {
		t.Error("the list shows hashes")
	}
	g := access.NewGate(again)
	signIn(t, g, "mo oduya", password, began) // capitals do not matter
	if who, ok := g.Machine(token); !ok || who != (access.Who{Name: "prometheus", Role: access.Viewer}) {
		t.Errorf("the token is of %v, %v", who, ok)
	}
}

func TestUsersFileFaults(t *testing.T) {
	hash, err := bcrypt.GenerateFromPassword([]byte(password), bcrypt.MinCost)
	if err != nil {
		t.Fatal(err)
	}
	user := func(members string) string { return `{"users":[{` + members + `}]}` }
	good := `"name":"a","role":"viewer","password":"` + string(hash) + `"`
	for _, tt := range []struct{ name, text, err string }{
		{"nothing", "", "EOF"},
		{"no JSON", "users: []", "invalid"},
		{"more behind it", `{"users":[]} {}`, "follows"},
		{"unknown key", `{"users":[],"groups":[]}`, "groups"},
		{"no name", user(`"role":"viewer","password":"` + string(hash) + `"`), "name"},
		{"space at the end", user(strings.Replace(good, `"a"`, `"a "`, 1)), "name"},
		{"line break in the name", user(strings.Replace(good, `"a"`, `"a\nb"`, 1)), "name"},
		{"long name", user(strings.Replace(good, `"a"`, `"`+strings.Repeat("a", 65)+`"`, 1)), "name"},
		{"no role", user(`"name":"a","password":"` + string(hash) + `"`), "role is missing"},
		{"no such role", user(strings.Replace(good, "viewer", "root", 1)), `"root"`},
		{"the zero role", user(strings.Replace(good, "viewer", "nobody", 1)), `"nobody"`},
		{"no password", user(`"name":"a","role":"viewer"`), "either"},
		{"both", user(good + `,"token":"` + strings.Repeat("0", 64) + `"`), "either"},
		{"plain password", user(`"name":"a","role":"viewer","password":"` + password + `"`), "bcrypt"},
		{"plain token", user(`"name":"a","role":"viewer","token":"throatwatch-abc"`), "SHA-256"},
		{"twice", `{"users":[{` + good + `},{` + strings.Replace(good, `"a"`, `"A"`, 1) + `}]}`, "already"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			if _, err := access.Parse([]byte(tt.text)); err == nil || !strings.Contains(err.Error(), tt.err) {
				t.Errorf("%v, want %q", err, tt.err)
			} else if strings.Contains(err.Error(), password) {
				t.Errorf("the error shows the password: %v", err)
			}
		})
	}
	if _, err := access.Parse([]byte(user(good))); err != nil {
		t.Errorf("a file without fault: %v", err)
	}
}

func TestChangesToUsers(t *testing.T) {
	u := people(t)
	if _, err := u.AddMachine("collector", access.Viewer); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		name string
		do   func() error
		err  error
	}{
		{"short password", func() error { return u.Add("a", access.Viewer, "eleven char") }, access.ErrPassword},
		{"long password", func() error { return u.Add("a", access.Viewer, strings.Repeat("a", 73)) }, access.ErrPassword},
		{"taken name", func() error { return u.Add("MO ODUYA", access.Viewer, password) }, access.ErrUserIs},
		{"name of a machine", func() error { return u.Add("collector", access.Viewer, password) }, access.ErrUserIs},
		{"odd name", func() error { return u.Add("a\x1b[2J", access.Viewer, password) }, access.ErrName},
		{"password of nobody", func() error { return u.SetPassword("nobody", password) }, access.ErrNoUser},
		{"password of a machine", func() error { return u.SetPassword("collector", password) }, access.ErrMachine},
		{"short new password", func() error { return u.SetPassword("Mo Oduya", "x") }, access.ErrPassword},
		{"nobody to remove", func() error { return u.Remove("nobody") }, access.ErrNoUser},
		{"removed", func() error { return u.Remove("collector") }, nil},
		{"gone", func() error { return u.Remove("collector") }, access.ErrNoUser},
	} {
		if err := tt.do(); !errors.Is(err, tt.err) {
			t.Errorf("%s: %v, want %v", tt.name, err, tt.err)
		}
	}
}

func TestSignIn(t *testing.T) {
	u := people(t)
	token, err := u.AddMachine("collector", access.Viewer)
	if err != nil {
		t.Fatal(err)
	}
	g := access.NewGate(u)
	s := signIn(t, g, "Mo Oduya", password, began)
	if s.Who != (access.Who{Name: "Mo Oduya", Role: access.Operator}) || len(s.ID) < 43 || len(s.CSRF) < 43 || s.ID == s.CSRF { // 256 bits in base 64
		t.Errorf("session %+v", s)
	}
	if again := signIn(t, g, "Mo Oduya", password, began); again.ID == s.ID || again.CSRF == s.CSRF {
		t.Error("two sessions have one secret")
	}
	for _, tt := range []struct{ what, name, password string }{
		{"another password", "Mo Oduya", other},
		{"no password", "Mo Oduya", ""},
		{"a longer one that begins alike", "Mo Oduya", password + strings.Repeat("x", 100)},
		{"a name that is none", "nobody", password},
		{"a machine by its token", "collector", token},
		{"a machine without", "collector", ""},
	} {
		if _, err := g.SignIn(t.Context(), tt.name, tt.password, here, began); !errors.Is(err, access.ErrCredentials) {
			t.Errorf("%s: %v", tt.what, err)
		}
	}
	if _, ok := g.Session("", began); ok {
		t.Error("no id is a session")
	}
	if _, ok := g.Machine(strings.TrimPrefix(token, "throatwatch-")); ok {
		t.Error("a part of a token is taken")
	}
	if _, ok := g.Machine(""); ok {
		t.Error("no token is taken")
	}
}

// A session ends by idleness, by age, by signing out, and with its user.
func TestSessionEnds(t *testing.T) {
	for _, tt := range []struct {
		name string
		do   func(g *access.Gate, u *access.Users, s access.Session) time.Time // gives when it is looked at
		ok   bool
	}{
		{"used again", func(*access.Gate, *access.Users, access.Session) time.Time { return began.Add(access.IdleFor - 1) }, true},
		{"not used", func(*access.Gate, *access.Users, access.Session) time.Time { return began.Add(access.IdleFor) }, false},
		{"used all the time", func(g *access.Gate, _ *access.Users, s access.Session) time.Time {
			at := began
			for ; at.Before(began.Add(access.LongestSession - time.Minute)); at = at.Add(time.Minute) {
				g.Session(s.ID, at)
			}
			return at
		}, true},
		{"used for too long", func(g *access.Gate, _ *access.Users, s access.Session) time.Time {
			at := began
			for ; at.Before(began.Add(access.LongestSession)); at = at.Add(time.Minute) {
				g.Session(s.ID, at)
			}
			return at
		}, false},
		{"signed out", func(g *access.Gate, _ *access.Users, s access.Session) time.Time { g.SignOut(s.ID); return began }, false},
		{"another password", func(g *access.Gate, u *access.Users, _ access.Session) time.Time {
			if err := u.SetPassword("Mo Oduya", other); err != nil {
				panic(err)
			}
			g.Use(u)
			return began
		}, false},
		{"removed", func(g *access.Gate, u *access.Users, _ access.Session) time.Time {
			if err := u.Remove("Mo Oduya"); err != nil {
				panic(err)
			}
			g.Use(u)
			return began
		}, false},
		{"somebody else removed", func(g *access.Gate, u *access.Users, _ access.Session) time.Time {
			if err := u.Remove("Edda Marsh"); err != nil {
				panic(err)
			}
			g.Use(u)
			return began
		}, true},
	} {
		t.Run(tt.name, func(t *testing.T) {
			u := people(t)
			g := access.NewGate(u)
			s := signIn(t, g, "Mo Oduya", password, began)
			text, err := u.Marshal()
			if err != nil {
				t.Fatal(err)
			}
			copied, err := access.Parse(text) // Use gets what was read from the file
			if err != nil {
				t.Fatal(err)
			}
			copied.Cost = bcrypt.MinCost
			if _, ok := g.Session(s.ID, tt.do(g, copied, s)); ok != tt.ok {
				t.Errorf("the session is there: %v", ok)
			}
		})
	}
}

// A role that is taken away is gone at once.
func TestRoleChanged(t *testing.T) {
	u := people(t)
	g := access.NewGate(u)
	s := signIn(t, g, "Mo Oduya", password, began)
	text, err := u.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	less, err := access.Parse(bytes.ReplaceAll(text, []byte(`"operator"`), []byte(`"viewer"`)))
	if err != nil {
		t.Fatal(err)
	}
	g.Use(less)
	if _, ok := g.Session(s.ID, began); ok {
		t.Error("the session goes on")
	}
	if s := signIn(t, g, "Mo Oduya", password, began); s.Who.Role != access.Viewer {
		t.Errorf("the new session has the role %v", s.Who.Role)
	}
}

// Tries slow down by name and address and by address; elsewhere nothing changes.
func TestThrottle(t *testing.T) {
	g := access.NewGate(people(t))
	wrong := func(name, address string, now time.Time) error {
		_, err := g.SignIn(t.Context(), name, other, address, now)
		return err
	}
	waits := func(err error) time.Duration {
		if throttled, ok := errors.AsType[*access.ThrottledError](err); ok {
			return throttled.Wait
		}
		return 0
	}
	now := began
	for range 5 {
		if err := wrong("Mo Oduya", here, now); !errors.Is(err, access.ErrCredentials) {
			t.Fatal(err)
		}
	}
	// After 5 free tries the pauses double, from 1 s to 5 min.
	for _, s := range []int64{1, 2, 4, 8, 16, 32, 64, 128, 256, 300, 300} {
		want := time.Duration(s * 1e9)
		if got := waits(wrong("mo oduya", here, now)); got != want {
			t.Fatalf("the wait is %v, want %v", got, want)
		}
		if _, err := g.SignIn(t.Context(), "Mo Oduya", password, here, now); waits(err) == 0 {
			t.Fatalf("the right password is taken within the pause: %v", err)
		}
		now = now.Add(want)
		if err := wrong("Mo Oduya", here, now); !errors.Is(err, access.ErrCredentials) {
			t.Fatalf("after the pause: %v", err)
		}
	}
	if _, err := g.SignIn(t.Context(), "Mo Oduya", password, "198.51.100.9", now); err != nil {
		t.Errorf("somebody elsewhere keeps him out: %v", err)
	}
	// 16 failures so far from here: other names have 4 more tries.
	for i := range 4 {
		if err := wrong(fmt.Sprint("name ", i), here, now); !errors.Is(err, access.ErrCredentials) {
			t.Fatalf("%d: %v", i, err)
		}
	}
	if err := wrong("one more", here, now); waits(err) == 0 {
		t.Errorf("one name after the other can be tried: %v", err)
	}
	now = now.Add(15 * time.Minute)
	if err := wrong("Mo Oduya", here, now); !errors.Is(err, access.ErrCredentials) {
		t.Errorf("failures are not forgotten: %v", err)
	}
	// Within a 64-bit prefix an attacker has all addresses of IPv6 [RFC 4291 2.5.4].
	for i := range 20 {
		if err := wrong(fmt.Sprint("six ", i), fmt.Sprintf("2001:db8:1:2::%x", i+1), now); !errors.Is(err, access.ErrCredentials) {
			t.Fatalf("%d: %v", i, err)
		}
	}
	if waits(wrong("six", "2001:db8:1:2:ffff::1", now)) == 0 || waits(wrong("six", "2001:db8:1:3::1", now)) != 0 {
		t.Error("addresses of one network are not counted together, or those of two are")
	}
}

// The tables are bounded: what is old goes first.
func TestBounds(t *testing.T) {
	g := access.NewGate(people(t))
	first := signIn(t, g, "Mo Oduya", password, began)
	second := signIn(t, g, "Mo Oduya", password, began.Add(time.Second))
	for i := range access.MostSessions - 1 {
		signIn(t, g, "Edda Marsh", password, began.Add(time.Duration(i+2)*time.Second))
	}
	at := began.Add(10 * time.Minute)
	if _, ok := g.Session(first.ID, at); ok {
		t.Error("the oldest session is still there")
	}
	if _, ok := g.Session(second.ID, at); !ok {
		t.Error("a session that had room is gone")
	}
	for i := range access.MostTries + 10 {
		g.Fail(fmt.Sprint("name ", i), here, at.Add(time.Duration(i)))
	}
	if n := g.Tries(); n > access.MostTries {
		t.Errorf("%d names are remembered, at most %d are due", n, access.MostTries)
	}
}

// One password is checked at a time, and who waits too long or goes away is let go.
func TestBusy(t *testing.T) {
	g := access.NewGate(people(t))
	release := g.Hold()
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := g.SignIn(ctx, "Mo Oduya", password, here, began); !errors.Is(err, context.Canceled) {
		t.Errorf("gone: %v", err)
	}
	short, cancel := context.WithTimeout(t.Context(), time.Millisecond)
	defer cancel()
	if _, err := g.SignIn(short, "Mo Oduya", password, here, began); !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("waiting: %v", err)
	}
	release()
	signIn(t, g, "Mo Oduya", password, began)
}

// Whatever is parsed is what it is when it is written and parsed again.
func FuzzParse(f *testing.F) {
	hash, err := bcrypt.GenerateFromPassword([]byte(password), bcrypt.MinCost)
	if err != nil {
		f.Fatal(err)
	}
	f.Add([]byte(`{"users":[{"name":"a","role":"viewer","password":"` + string(hash) + `"}]}`))
	f.Add([]byte(`{"users":[{"name":"b","role":"engineer","token":"` + strings.Repeat("0f", 32) + `"}]}`))
	f.Add([]byte(`{"users":null}`))
	f.Fuzz(func(t *testing.T, text []byte) {
		u, err := access.Parse(text)
		if err != nil {
			return
		}
		out, err := u.Marshal()
		if err != nil || !json.Valid(out) {
			t.Fatalf("%v: %q", err, out)
		}
		again, err := access.Parse(out)
		if err != nil {
			t.Fatalf("%v: %q", err, out)
		}
		if twice, err := again.Marshal(); err != nil || !bytes.Equal(out, twice) {
			t.Errorf("%q becomes %q", out, twice)
		}
	})
}
