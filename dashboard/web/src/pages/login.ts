// The login of a server that knows its users.

import { RequestError, api } from '../api';
import { attr, h, text } from '../dom';
import { type Session, sessionOf } from '../session';

/** Asks for name and password within `place` until the server takes them. */
export function login(place: HTMLElement, why: string): Promise<Session> {
  return new Promise((done) => {
    const name = h('input', { name: 'username', type: 'text', autocomplete: 'username', required: true, maxlength: '100', 'data-q': 'login-name' });
    const password = h('input', { name: 'password', type: 'password', autocomplete: 'current-password', required: true, maxlength: '200', 'data-q': 'login-password' });
    const button = h('button', { type: 'submit', 'data-q': 'login' }, 'Log in');
    const trouble = h('p', { class: 'trouble', role: 'alert' }, why);
    const form = h('form', {
      class: 'login', 'aria-label': 'Log in', onsubmit: (e: Event) => {
        e.preventDefault();
        attr(button, 'disabled', true);
        api.login(name.value.trim(), password.value).then((answer) => {
          password.value = '';
          done(sessionOf(answer));
        }, (e2: Error) => {
          attr(button, 'disabled', false);
          text(trouble, e2 instanceof RequestError && e2.status === 401 ? 'Name or password is wrong.' : `Not logged in: ${e2.message}.`);
          password.select();
        });
      },
    }, h('h1', {}, 'throatwatch'), h('label', { class: 'field' }, h('span', { class: 'label' }, 'Name'), name), h('label', { class: 'field' }, h('span', { class: 'label' }, 'Password'), password), button, trouble,
      h('p', { class: 'extra' }, 'Alarms are watched and sounded only on a page that is logged in. This display is not protection.'));
    place.replaceChildren(place === document.body ? h('main', {}, form) : form);
    name.focus();
  });
}
