package main

import (
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"os"

	"github.com/spf13/pflag"

	"throatwatch/ingest/mqtt"
)

// brokerOptions are the flags that say which broker, and who we are to it.
type brokerOptions struct {
	url, user, passwordFile string
	ca, cert, key           string
}

func (o *brokerOptions) flags(fs *pflag.FlagSet, url, what string) {
	fs.StringVar(&o.url, "broker", url, what)
	fs.StringVar(&o.user, "broker-user", "", "user name at that broker")
	fs.StringVar(&o.passwordFile, "broker-password-file", "", "file with the password at that broker")
	fs.StringVar(&o.ca, "broker-ca", "", "file with the certificates, PEM, by one of which that broker proves itself (default: the system's)")
	fs.StringVar(&o.cert, "broker-cert", "", "file with our certificate for that broker, PEM")
	fs.StringVar(&o.key, "broker-key", "", "file with its key, PEM")
}

// check finds what cannot be meant.
func (o *brokerOptions) check() error {
	switch {
	case o.url == "" && (o.user != "" || o.passwordFile != ""):
		return errors.New("--broker-user and --broker-password-file are for a site broker: add --broker")
	case o.url == "" && (o.ca != "" || o.cert != "" || o.key != ""):
		return errors.New("--broker-ca, --broker-cert and --broker-key are for a site broker: add --broker mqtts://host:port")
	case (o.cert == "") != (o.key == ""):
		return errors.New("--broker-cert and --broker-key belong together: give both")
	}
	return nil
}

// tls gives the TLS settings that the flags ask for, nil for those of the URL alone.
func (o *brokerOptions) tls() (*tls.Config, error) {
	if o.ca == "" && o.cert == "" {
		return nil, nil //nolint:nilnil // a broker without files for TLS is no error
	}
	c := &tls.Config{MinVersion: tls.VersionTLS12}
	if o.ca != "" {
		text, err := os.ReadFile(o.ca)
		if err != nil {
			return nil, fmt.Errorf("--broker-ca: %w", err)
		}
		c.RootCAs = x509.NewCertPool()
		if !c.RootCAs.AppendCertsFromPEM(text) {
			return nil, fmt.Errorf("--broker-ca %s: there is no certificate in it", o.ca)
		}
	}
	if o.cert != "" {
		pair, err := tls.LoadX509KeyPair(o.cert, o.key)
		if err != nil {
			return nil, fmt.Errorf("--broker-cert, --broker-key: %w", err)
		}
		c.Certificates = []tls.Certificate{pair}
	}
	return c, nil
}

// publisher gives the settings of a client that only publishes.
func (o *brokerOptions) publisher() (c mqtt.PublisherConfig, err error) {
	c = mqtt.PublisherConfig{URL: o.url, Username: o.user}
	if c.Password, err = readSecret(o.passwordFile); err != nil {
		return c, err
	}
	c.TLS, err = o.tls()
	return c, err
}
