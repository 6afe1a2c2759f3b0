package access

import (
	"bytes"
	"crypto/rand"
	"crypto/sha256"
	"crypto/subtle"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"

	"golang.org/x/crypto/bcrypt"
)

const (
	// defaultCost is the cost of a password hash: about a quarter of a second.
	defaultCost = 12
	// ShortestPassword is the least length of a password, characters.
	ShortestPassword = 12
	longestPassword  = 72 // bytes: bcrypt looks at no more
	longestName      = 64 // characters
	mostUsers        = 1000
	// tokenMark begins every token, so that one that lies in the wrong place is
	// found by searching for it.
	tokenMark = "throatwatch-"
)

// Errors of Users.
var (
	ErrNoUser   = errors.New("there is no user of that name")
	ErrUserIs   = errors.New("there is a user of that name already")
	ErrName     = fmt.Errorf("a name has 1 to %d printable characters and no space at its ends", longestName)
	ErrPassword = fmt.Errorf("a password has at least %d characters and at most %d bytes", ShortestPassword, longestPassword)
	ErrMachine  = errors.New("a machine has a token and no password")
)

// User is a line of the file: a person with a password or a machine with a token.
type User struct {
	Name     string `json:"name"`
	Role     Role   `json:"role"`
	Password string `json:"password,omitempty"` // bcrypt
	Token    string `json:"token,omitempty"`    // SHA-256, hex
}

// Machine tells that the user is one.
func (u *User) Machine() bool { return u.Token != "" }

// Users are those of a file. The zero value has none.
type Users struct {
	Cost int // of new password hashes; 0 = 12

	list []User
}

// usersFile is the file: JSON, so that it can be read and kept under control with
// the tools that a site has.
type usersFile struct {
	Users []User `json:"users"`
}

// Parse reads a file of users. It names the first user with a fault.
func Parse(text []byte) (*Users, error) {
	dec := json.NewDecoder(bytes.NewReader(text))
	dec.DisallowUnknownFields()
	var f usersFile
	if err := dec.Decode(&f); err != nil {
		return nil, fmt.Errorf("users file: %w", err)
	}
	if _, err := dec.Token(); !errors.Is(err, io.EOF) {
		return nil, errors.New("users file: something follows the object")
	}
	if len(f.Users) > mostUsers {
		return nil, fmt.Errorf("users file: %d users: at most %d", len(f.Users), mostUsers)
	}
	u := &Users{}
	for i := range f.Users {
		one := &f.Users[i]
		if err := u.fits(one); err != nil {
			return nil, fmt.Errorf("users file: user %d, %q: %w", i+1, one.Name, err)
		}
		u.list = append(u.list, *one)
	}
	return u, nil
}

// fits tells what keeps a user out of the list.
func (u *Users) fits(one *User) error {
	if err := checkName(one.Name); err != nil {
		return err
	}
	if u.find(one.Name) >= 0 {
		return ErrUserIs
	}
	if one.Role == Nobody {
		return errors.New("the role is missing: give viewer, operator or engineer")
	}
	if (one.Password == "") == (one.Token == "") {
		return errors.New("give either a password hash or the hash of a token")
	}
	if one.Machine() {
		if b, err := hex.DecodeString(one.Token); err != nil || len(b) != sha256.Size {
			return errors.New("the token is no SHA-256 in hex: make one by throatwatch user token")
		}
		return nil
	}
	if _, err := bcrypt.Cost([]byte(one.Password)); err != nil {
		return errors.New("the password is no bcrypt hash: set it by throatwatch user set-password")
	}
	return nil
}

func checkName(name string) error {
	if name == "" || utf8.RuneCountInString(name) > longestName || strings.TrimSpace(name) != name ||
		strings.ContainsFunc(name, func(r rune) bool { return !unicode.IsPrint(r) }) {
		return ErrName
	}
	return nil
}

// Marshal writes the file.
func (u *Users) Marshal() ([]byte, error) {
	b, err := json.MarshalIndent(usersFile{slices.Concat([]User{}, u.list)}, "", "  ")
	if err != nil {
		return nil, fmt.Errorf("users file: %w", err)
	}
	return append(b, '\n'), nil
}

// List gives the users by name, without their hashes.
func (u *Users) List() []User {
	out := slices.Clone(u.list)
	for i := range out {
		out[i].Password = ""
	}
	slices.SortFunc(out, func(a, b User) int { return strings.Compare(strings.ToLower(a.Name), strings.ToLower(b.Name)) })
	return out
}

// Add adds a person.
func (u *Users) Add(name string, role Role, password string) error {
	hash, err := u.hash(password)
	if err != nil {
		return err
	}
	return u.add(User{Name: name, Role: role, Password: hash})
}

// AddMachine adds a machine and gives its token, which is kept nowhere else.
func (u *Users) AddMachine(name string, role Role) (token string, err error) {
	token = tokenMark + random()
	return token, u.add(User{Name: name, Role: role, Token: tokenHash(token)})
}

func (u *Users) add(one User) error {
	if err := u.fits(&one); err != nil {
		return fmt.Errorf("user %q: %w", one.Name, err)
	}
	if len(u.list) == mostUsers {
		return fmt.Errorf("user %q: there are %d users: no more are taken", one.Name, mostUsers)
	}
	u.list = append(u.list, one)
	return nil
}

// SetPassword gives a person another password. Their sessions end with the old one.
func (u *Users) SetPassword(name, password string) error {
	i := u.find(name)
	if i < 0 {
		return fmt.Errorf("user %q: %w", name, ErrNoUser)
	}
	if u.list[i].Machine() {
		return fmt.Errorf("user %q: %w", name, ErrMachine)
	}
	hash, err := u.hash(password)
	if err != nil {
		return err
	}
	u.list[i].Password = hash
	return nil
}

// Remove removes a person or a machine.
func (u *Users) Remove(name string) error {
	i := u.find(name)
	if i < 0 {
		return fmt.Errorf("user %q: %w", name, ErrNoUser)
	}
	u.list = slices.Delete(u.list, i, i+1)
	return nil
}

func (u *Users) find(name string) int {
	return slices.IndexFunc(u.list, func(one User) bool { return same(one.Name, name) })
}

func (u *Users) hash(password string) (string, error) {
	if utf8.RuneCountInString(password) < ShortestPassword || len(password) > longestPassword {
		return "", ErrPassword
	}
	cost := u.Cost
	if cost == 0 {
		cost = defaultCost
	}
	h, err := bcrypt.GenerateFromPassword([]byte(password), cost)
	if err != nil {
		return "", fmt.Errorf("password: %w", err)
	}
	return string(h), nil
}

// machine finds the machine of a token.
func (u *Users) machine(token string) (w Who, ok bool) {
	hash := tokenHash(token)
	for i := range u.list {
		one := &u.list[i]
		if one.Machine() && subtle.ConstantTimeCompare([]byte(strings.ToLower(one.Token)), []byte(hash)) == 1 {
			w, ok = Who{one.Name, one.Role}, true
		}
	}
	return w, ok
}

// tokenHash needs no salt and no cost: a token has 256 random bits.
func tokenHash(token string) string {
	sum := sha256.Sum256([]byte(token))
	return hex.EncodeToString(sum[:])
}

// random gives 256 bits as text.
func random() string {
	b := make([]byte, 32)
	_, _ = rand.Read(b) // it never fails [crypto/rand Read]
	return base64.RawURLEncoding.EncodeToString(b)
}
