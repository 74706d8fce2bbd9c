import { isIPv4 } from 'node:net';

/**
 * What counts as one address where peers are counted: an IPv4 address, also where it comes mapped into IPv6, and of IPv6
 * the first 64 bits, since one host may take any address of its network (RFC 4291, section 2.5.1).
 */
export function peerKey(remoteAddress: string | undefined): string {
  if (remoteAddress === undefined) return 'unknown';
  const address = remoteAddress.replace(/%.*$/, '');
  const mapped = /^::ffff:(?<v4>[\d.]+)$/i.exec(address)?.groups?.v4;
  if (mapped !== undefined) return mapped;
  if (isIPv4(address)) return address;
  return `${networkOf(address)}::/64`;
}

/** The first four groups of an IPv6 address, which Node writes with `::` for the longest run of zeros. */
function networkOf(address: string): string {
  const [head = '', tail] = address.split('::');
  const groups = head === '' ? [] : head.split(':');
  if (tail !== undefined) {
    const after = tail === '' ? [] : tail.split(':');
    while (groups.length + after.length < 8) groups.push('0');
    groups.push(...after);
  }
  return groups.slice(0, 4).join(':');
}
