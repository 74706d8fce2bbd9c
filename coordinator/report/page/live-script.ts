/**
 * What the live page runs in the browser: follows the round log as server-sent events, one row a round, and ends at the
 * outcome. Texts of the log go in as text, never as markup.
 */
export const LIVE_SCRIPT = `(() => {
'use strict';
const at = (id) => document.getElementById(id);
const live = at('live');
const rowsMost = 200;
const rounds = [];
const say = (text) => { at('status').textContent = text; };
const put = (id, text) => { at(id).textContent = text; };
const size = (value) => value === 0 ? '0' : value.toPrecision(2).replace(/e\\+?/, 'e');
const time = (ms) => ms < 995 ? (ms / 1000).toFixed(2) + ' s' : (ms / 1000).toFixed(1) + ' s';
const off = (round) => round.relativeGap === null ? '' : (round.gapMeasured ? '' : 'about ') + size(round.relativeGap);
const row = (round) => {
  const line = document.createElement('tr');
  const cells = [String(round.round), round.purpose, off(round), time(round.tookMs), round.slowest === null ? '' : round.slowest.site + ', ' + time(round.slowest.ms), round.standIns.map((one) => one.site).join(', ')];
  cells.forEach((text, column) => {
    const cell = document.createElement(column === 0 ? 'th' : 'td');
    if (column === 0) cell.scope = 'row';
    if (column === 2 || column === 3) cell.className = 'number';
    cell.textContent = text;
    line.append(cell);
  });
  const body = at('rounds');
  body.prepend(line);
  while (body.rows.length > rowsMost) body.lastElementChild.remove();
};
const draw = (tolerance) => {
  const shown = rounds.filter((round) => round.relativeGap !== null);
  if (shown.length === 0) return;
  const low = Math.log10(tolerance) - 2;
  const last = Math.max(2, rounds.length);
  const x = (round) => 40 + 650 * (round - 1) / (last - 1);
  const y = (gap) => 10 + 160 * Math.min(1, Math.max(0, Math.log10(Math.max(gap, 1e-300)) / low));
  at('trace').setAttribute('d', shown.map((round, i) => (i === 0 ? 'M' : 'L') + x(round.round).toFixed(1) + ',' + y(round.relativeGap).toFixed(1)).join(''));
  at('tolerance').setAttribute('d', 'M40,' + y(tolerance).toFixed(1) + 'H690');
  const now = shown[shown.length - 1];
  at('here').setAttribute('transform', 'translate(' + x(now.round).toFixed(1) + ',' + y(now.relativeGap).toFixed(1) + ')');
  at('gap').removeAttribute('hidden');
};
const site = (name, state) => {
  let item = [...at('sites').children].find((one) => one.dataset.site === name);
  if (item === undefined) {
    item = document.createElement('li');
    item.dataset.site = name;
    at('sites').append(item);
  }
  item.textContent = name + ': ' + state;
};
const heard = {
  accepted: (event) => { if (Array.isArray(event.sites)) event.sites.forEach((name) => site(name, 'not connected')); say('Accepted.'); },
  waiting: (event) => say('Waiting for ' + event.sites.join(', ') + '.'),
  site: (event) => site(event.site, event.change === 'connected' ? 'connected' : 'not connected'),
  survey: (event) => {
    event.sites.forEach((one) => site(one.site, one.rowsUsed + ' rows, ' + one.rowsDropped + ' left out'));
    put('rows', String(event.rowsTotal));
    put('rung', event.rung);
    say('The tables are surveyed: ' + event.coefficients + ' coefficients over ' + event.rowsTotal + ' rows.');
  },
  round: (event) => {
    rounds.push(event);
    row(event);
    draw(event.tolerance);
    put('round', event.round + ' of at most ' + event.roundsMost);
    if (event.relativeGap !== null) put('distance', off(event) + '; the tolerance is ' + event.tolerance);
    if (event.round % 10 === 1) say('Round ' + event.round + (event.relativeGap === null ? '.' : ' is ' + off(event) + ' off the optimum.'));
  },
  late: (event) => say('Late: ' + event.sites.join(', ') + '. Asked again.'),
  without: (event) => { rounds.length = 0; say('Going on without ' + event.sites.map((one) => one.site).join(', ') + ': the fit begins again.'); },
  resumed: (event) => say('The coordinator was started again; the run goes on at round ' + event.round + '.'),
  outcome: (event) => {
    source.close();
    put('state', 'ended as ' + event.outcome);
    say((event.outcome === 'solved' ? 'Solved' : 'Not solved: ' + event.outcome) + ' after ' + event.rounds + ' rounds.' + (event.reason === null ? '' : ' ' + event.reason));
    at('ended').removeAttribute('hidden');
  },
};
const source = new EventSource(live.dataset.log);
source.onmessage = (message) => {
  const event = JSON.parse(message.data);
  if (event.event !== 'outcome') put('state', 'open');
  if (Object.hasOwn(heard, event.event)) heard[event.event](event);
};
source.onerror = () => {
  if (source.readyState === EventSource.CLOSED) say('The round log is not to be had. Sign in again, or load this page again.');
};
})();
`;
