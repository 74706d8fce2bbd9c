import type { SitePost } from './late-method.js';

/** Curvature matrices that an answer to this post holds. */
const matricesOf = (post: SitePost): number =>
  post.kind === 'joint' ? 2 : post.kind === 'evaluate' && post.want === 'curvature' ? 1 : 0;

/** Curvature matrices that may still be asked of each site. What was asked counts, whether or not an answer came. */
export class MatrixBudget {
  /** More was wanted than is left. */
  spent = false;
  private readonly left: number[];

  constructor(
    sites: number,
    private readonly most: number,
  ) {
    this.left = Array.from({ length: sites }, () => most);
  }

  get unlimited(): boolean {
    return this.most === Number.POSITIVE_INFINITY;
  }

  /** Of the site. */
  leftOf(site: number): number {
    return this.left[site];
  }

  /** Of the site that has least. */
  least(): number {
    return Math.min(...this.left);
  }

  /** Takes what these posts ask for, or nothing where it is not there. */
  take(posts: readonly { readonly site: number; readonly post: SitePost }[]): void {
    this.spent = posts.some(({ site, post }) => this.left[site] < matricesOf(post));
    if (this.spent) return;
    for (const { site, post } of posts) this.left[site] -= matricesOf(post);
  }
}
