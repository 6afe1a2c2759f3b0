// Who acts at this page, and what that person may do. The server decides; the page
// only does not offer what it would refuse, and says why.

export type Role = 'viewer' | 'operator' | 'engineer';

export interface Session {
  name: string;
  role: Role;
  csrf: string;
  open: boolean; // a server without users: whoever reaches it acts, under a name of choice
}

/** What can be done from the page. */
export type Deed =
  | 'acknowledge' | 'reset' | 'shelve' | 'unshelve' | 'mark' | 'entry' | 'run' | 'note'
  | 'checks' | 'take' | 'skip' | 'go-to'
  | 'out-of-service' | 'in-service' | 'readmit' | 'swap' | 'config' | 'delete' | 'card' | 'accept' | 'reject';

const engineers = new Set<Deed>(['out-of-service', 'in-service', 'readmit', 'swap', 'config', 'delete', 'card', 'accept', 'reject']);

/** The session of a server that knows none. */
export const openSession: Session = { name: '', role: 'operator', csrf: '', open: true };

/** Reads an answer of the server; what it leaves out is nobody's. */
export function sessionOf(answer: Partial<Session>): Session {
  const role = answer.role === 'operator' || answer.role === 'engineer' ? answer.role : 'viewer';
  return { name: answer.name ?? '', role, csrf: answer.csrf ?? '', open: answer.open ?? false };
}

/** Why a person may not do it; "" when nothing stands against it. */
export function refusal(s: Session, deed: Deed): string {
  if (s.role === 'engineer' || (s.open && deed === 'config')) return ''; // who can reach an open watch can change its files as well
  if (engineers.has(deed)) return 'for an engineer';
  return s.role === 'operator' ? '' : 'for an operator';
}
